"""The fringes that a spectrum makes in a two-beam interferometer with residual glass."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from bench.optics import glass as glasses
from bench.optics.coherence import fourier
from bench.optics.spectra import Spectrum

if TYPE_CHECKING:
    from numpy.typing import ArrayLike

FloatArray = NDArray[np.float64]

__all__ = ["interferogram"]

_PHASE_PER_SAMPLE_RAD = 0.2
_MOST_SAMPLES = 200_000


def interferogram(
    spectrum: Spectrum,
    opd_m: ArrayLike,
    *,
    glass: str | None = None,
    thickness_m: float = 0.0,
    phase_rad: float = 0.0,
) -> FloatArray:
    """Normalised fringes: real part of the mean of exp(i (2 pi s opd + glass + phase)).

    ``opd_m`` has shape (n,) and leaves the glass out: ``thickness_m`` of ``glass``, the signed path
    that arm A has more of where arm B has air, adds 2 pi s (n(s) - 1) thickness to the phase at
    wavenumber s. The packet so stands at OPD = -(n_g - 1) thickness. Values lie within +-1.

    Wavelengths beyond the range where the index is known are given the index at its end. Raises
    UnknownMaterial, and ValueError where thickness is given without a glass or is so large that the
    spectrum cannot be sampled finely enough.
    """
    opd = np.asarray(opd_m, dtype=np.float64)
    wavenumber, power = spectrum.wavenumber, spectrum.power
    centre = spectrum.mean_wavenumber
    shift_m, offset_rad = 0.0, phase_rad
    chirp: FloatArray = np.zeros_like(wavenumber)
    if thickness_m != 0.0:
        if glass is None:
            raise ValueError("residual glass has a thickness but no material")
        shift_m, at_centre = _linear_part(glass, centre, thickness_m)
        offset_rad = phase_rad + at_centre
        chirp = _chirp(glass, wavenumber, centre, thickness_m)
        steepest = float(np.max(np.abs(np.diff(chirp))))
        parts = max(1, int(np.ceil(steepest / _PHASE_PER_SAMPLE_RAD)))
        if parts > 1:
            if parts * wavenumber.size > _MOST_SAMPLES:
                raise ValueError(f"{thickness_m:g} m of {glass} is too much for this spectrum")
            fine = np.interp(
                np.arange((wavenumber.size - 1) * parts + 1) / parts,
                np.arange(wavenumber.size),
                wavenumber,
            )
            power = np.interp(fine, wavenumber, power)
            wavenumber = fine
            chirp = _chirp(glass, wavenumber, centre, thickness_m)
    # The group delay is taken out of the phase and put into the OPD: what is left varies slowly
    # from sample to sample, so that linear interpolation of the amplitude is good.
    amplitude = power * np.exp(1j * chirp)
    envelope = fourier(wavenumber, amplitude, opd + shift_m, centre) / spectrum.total_power
    return np.real(envelope * np.exp(1j * (2.0 * np.pi * centre * opd + offset_rad)))


def _clipped_m(name: str, wavenumber: FloatArray) -> FloatArray:
    low, high = glasses.material(name).range_m
    result: FloatArray = np.clip(1.0 / wavenumber, low, high)
    return result


def _linear_part(name: str, centre: float, thickness_m: float) -> tuple[float, float]:
    """Group shift in OPD and phase at the mean wavenumber."""
    wavelength = _clipped_m(name, np.array([centre]))
    group = float(glasses.group_index(name, wavelength)[0])
    phase = float(glasses.index(name, wavelength)[0])
    return (group - 1.0) * thickness_m, 2.0 * np.pi * centre * (phase - 1.0) * thickness_m


def _chirp(name: str, wavenumber: FloatArray, centre: float, thickness_m: float) -> FloatArray:
    """Phase of the glass less its value and its slope at the mean wavenumber."""
    shift_m, at_centre = _linear_part(name, centre, thickness_m)
    n = glasses.index(name, _clipped_m(name, wavenumber))
    phase = 2.0 * np.pi * wavenumber * (n - 1.0) * thickness_m
    result: FloatArray = phase - at_centre - 2.0 * np.pi * (wavenumber - centre) * shift_m
    return result
