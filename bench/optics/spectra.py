"""Spectra of light sources, held as power per vacuum wavenumber.

A spectrum is piecewise linear in wavenumber between its samples. Every integral in this room is
exact for that shape, so that no grid's own period shows up as a packet that is not there.

Wavenumber is used throughout because an interferogram is its Fourier partner; a density per
wavelength becomes one per wavenumber by the factor wavelength squared.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from numpy.typing import ArrayLike

FloatArray = NDArray[np.float64]

__all__ = ["Spectrum", "blackbody", "gaussian", "lorentzian", "rectangular", "tabulated"]

# Second radiation constant h c / k_B in m K, exact in the SI of 2019.
SECOND_RADIATION_CONSTANT_M_K = 6.62607015e-34 * 299792458.0 / 1.380649e-23

_GAUSSIAN_REACH = 2.5  # in FWHM to either side; 3e-8 of the peak is left there
_LORENTZIAN_REACH = 2e4  # in half widths; 3e-5 of the power lies beyond
_SAMPLES = 1001


@dataclass(frozen=True, eq=False)
class Spectrum:
    """Power per wavenumber, in any unit, over vacuum wavenumber.

    ``wavenumber`` in 1/m, shape (n,), n >= 2, positive and strictly rising; ``power`` of the same
    shape, finite, not negative and not all zero. Raises ValueError otherwise.
    """

    wavenumber: FloatArray
    power: FloatArray

    def __post_init__(self) -> None:
        wavenumber = np.array(self.wavenumber, dtype=np.float64)
        power = np.array(self.power, dtype=np.float64)
        if wavenumber.ndim != 1 or wavenumber.size < 2 or wavenumber.shape != power.shape:
            raise ValueError("a spectrum needs two rows of equal length, two samples or more")
        if not (np.all(np.isfinite(wavenumber)) and np.all(np.isfinite(power))):
            raise ValueError("a spectrum holds a number that is not finite")
        if wavenumber[0] <= 0.0 or np.any(np.diff(wavenumber) <= 0.0):
            raise ValueError("wavenumbers of a spectrum must be positive and rise strictly")
        if np.any(power < 0.0) or not np.any(power > 0.0):
            raise ValueError("power of a spectrum must not be negative, nor zero everywhere")
        wavenumber.setflags(write=False)
        power.setflags(write=False)
        object.__setattr__(self, "wavenumber", wavenumber)
        object.__setattr__(self, "power", power)

    @cached_property
    def total_power(self) -> float:
        """Integral of the power over wavenumber."""
        return float(np.sum(np.diff(self.wavenumber) * (self.power[1:] + self.power[:-1])) / 2.0)

    @cached_property
    def mean_wavenumber(self) -> float:
        """Mean wavenumber in 1/m, weighted by power."""
        # Measured from the middle of the grid: a laser's line is 1e-9 of its wavenumber wide.
        middle = float(self.wavenumber[0] + self.wavenumber[-1]) / 2.0
        low, high = self.wavenumber[:-1] - middle, self.wavenumber[1:] - middle
        left, right = self.power[:-1], self.power[1:]
        moment = (high - low) * (2.0 * (low * left + high * right) + low * right + high * left) / 6
        return middle + float(np.sum(moment)) / self.total_power

    @property
    def mean_wavelength_m(self) -> float:
        """One over the mean wavenumber: the carrier's period in OPD, not the mean wavelength."""
        return 1.0 / self.mean_wavenumber

    @cached_property
    def half_power_band(self) -> tuple[float, float]:
        """Outermost wavenumbers in 1/m where the power is half its greatest, (low, high).

        Where the spectrum is cut off above half power, the cut is the edge.
        """
        half = float(np.max(self.power)) / 2.0
        above = np.flatnonzero(self.power >= half)
        first, last = int(above[0]), int(above[-1])
        low = self._crossing(first - 1, first, half) if first > 0 else float(self.wavenumber[0])
        high = (
            self._crossing(last, last + 1, half)
            if last + 1 < self.power.size
            else float(self.wavenumber[-1])
        )
        return low, high

    def _crossing(self, left: int, right: int, level: float) -> float:
        begin, end = float(self.power[left]), float(self.power[right])
        span = float(self.wavenumber[right] - self.wavenumber[left])
        return float(self.wavenumber[left]) + span * (level - begin) / (end - begin)


def _middle_and_width(centre_m: float, fwhm_m: float) -> tuple[float, float]:
    """Middle and width, 1/m, of the band between the wavelengths centre +- fwhm/2.

    Written so that nothing cancels where the width is a tiny part of the centre.
    """
    if not (np.isfinite(centre_m) and np.isfinite(fwhm_m) and centre_m > 0.0 and fwhm_m > 0.0):
        raise ValueError(
            f"centre and width of a spectrum must be positive; they are {centre_m:g} m and"
            f" {fwhm_m:g} m"
        )
    if fwhm_m >= 2.0 * centre_m:
        raise ValueError(
            f"a width of {fwhm_m:g} m about {centre_m:g} m would reach down to wavelength zero"
        )
    product = (centre_m - fwhm_m / 2.0) * (centre_m + fwhm_m / 2.0)
    if fwhm_m / product < 1e-12 / centre_m:
        raise ValueError(f"a width of {fwhm_m:g} m about {centre_m:g} m is too narrow to sample")
    return centre_m / product, fwhm_m / product


def gaussian(centre_m: float, fwhm_m: float) -> Spectrum:
    """Gaussian in wavenumber, at half power at the wavelengths ``centre_m`` +- ``fwhm_m``/2.

    Needs 0 < fwhm_m < 2 centre_m; raises ValueError otherwise.
    """
    middle, width = _middle_and_width(centre_m, fwhm_m)
    low = max(middle - _GAUSSIAN_REACH * width, 0.02 * middle)
    wavenumber = np.linspace(low, middle + _GAUSSIAN_REACH * width, _SAMPLES)
    return Spectrum(wavenumber, np.exp(-4.0 * np.log(2.0) * ((wavenumber - middle) / width) ** 2))


def lorentzian(centre_m: float, fwhm_m: float) -> Spectrum:
    """Lorentzian in wavenumber, at half power at the wavelengths ``centre_m`` +- ``fwhm_m``/2.

    Its far wings are cut, symmetrically, before they reach wavenumber zero; 3e-5 of the power of a
    narrow line lies beyond the samples. Raises ValueError unless 0 < fwhm_m < 2 centre_m.
    """
    middle, width = _middle_and_width(centre_m, fwhm_m)
    reach = min(_LORENTZIAN_REACH, 0.98 * middle / (width / 2.0))
    # Spacing that grows with the distance from the line keeps both the peak and the wings smooth.
    offset = np.sinh(np.linspace(-np.arcsinh(reach), np.arcsinh(reach), 2 * _SAMPLES - 1))
    return Spectrum(middle + offset * width / 2.0, 1.0 / (1.0 + offset**2))


def rectangular(centre_m: float, fwhm_m: float) -> Spectrum:
    """Constant per wavenumber between the wavelengths ``centre_m`` +- ``fwhm_m``/2, else nothing.

    Raises ValueError unless 0 < fwhm_m < 2 centre_m.
    """
    middle, width = _middle_and_width(centre_m, fwhm_m)
    wavenumber = middle + width * np.linspace(-0.5, 0.5, 201)
    return Spectrum(wavenumber, np.ones_like(wavenumber))


def blackbody(temperature_k: float, band_m: tuple[float, float]) -> Spectrum:
    """Planck radiator at ``temperature_k`` > 0, seen between the two wavelengths of ``band_m``.

    Power per wavenumber s goes as s^3 / (exp(c2 s / T) - 1). Raises ValueError for a temperature or
    a band that is not positive.
    """
    short, long = sorted(band_m)
    if not (temperature_k > 0.0 and 0.0 < short < long):
        raise ValueError(
            f"a black body needs a positive temperature and band; they are {temperature_k:g} K and"
            f" {short:g} to {long:g} m"
        )
    wavenumber = np.linspace(1.0 / long, 1.0 / short, _SAMPLES)
    exponent = SECOND_RADIATION_CONSTANT_M_K * wavenumber / temperature_k
    logarithm = 3.0 * np.log(wavenumber) - exponent - np.log1p(-np.exp(-exponent))
    return Spectrum(wavenumber, np.exp(logarithm - np.max(logarithm)))


def tabulated(wavelength_m: ArrayLike, power_per_wavelength: ArrayLike) -> Spectrum:
    """A measured curve: power per wavelength at vacuum wavelengths, in any order, shapes (n,).

    The density per wavenumber is the density per wavelength times wavelength squared. Raises
    ValueError for wavelengths that are not positive or stand there twice, for negative power, and
    for fewer than two samples.
    """
    wavelength = np.asarray(wavelength_m, dtype=np.float64)
    power = np.asarray(power_per_wavelength, dtype=np.float64)
    if wavelength.ndim != 1 or wavelength.shape != power.shape or wavelength.size < 2:
        raise ValueError(
            "a table of a spectrum needs two columns of equal length, two rows or more"
        )
    if not np.all(np.isfinite(wavelength)) or np.any(wavelength <= 0.0):
        raise ValueError("wavelengths of a spectrum must be positive and finite")
    order = np.argsort(wavelength)[::-1]
    if np.any(np.diff(wavelength[order]) >= 0.0):
        raise ValueError("a wavelength stands twice in the table of a spectrum")
    return Spectrum(1.0 / wavelength[order], power[order] * wavelength[order] ** 2)
