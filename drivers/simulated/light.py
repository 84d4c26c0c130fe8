"""Light through two arms: fringes as an integral over the source's spectrum.

    fringes(D) = integral of w(s) cos(2 pi s D + 2 pi s t n_air (n(s) - 1) + phase) ds

with vacuum wavenumber ``s``, the spectrum ``w`` of unit area, the path difference ``D`` of the air
paths, and residual glass of thickness ``t`` and index ``n`` relative to the air that it displaces.
The integral is taken once for every source on a fine grid of ``D`` (midpoint rule, by a discrete
Fourier transform) with the carrier at the mean wavenumber removed, and read off that table by a
cubic through four points. Beyond the table no source has fringes above ``TOLERANCE``.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from drivers.simulated.glass import Glass

__all__ = ["TOLERANCE", "Lamp", "Packet", "lamp", "packet"]

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

LIGHT_M_PER_S = 299_792_458.0  # exact, by definition of the metre
SECOND_RADIATION_M_K = 1.438776877e-2  # h c / k, CODATA 2018
TOLERANCE = 1e-4  # of the fringe amplitude, table and quadrature together; held by a test
_NARROWEST = 1e-6  # 1/m: coherent over a thousand kilometres, which no bench can tell from more
_OVERSAMPLING = 12  # table points for each period of the fastest beat within the spectrum
_MOST_POINTS = 1 << 21  # of a table: 32 MB


@dataclass(frozen=True)
class Lamp:
    """A spectrum between two wavenumbers (1/m) and the path beyond which it cannot interfere.

    ``power`` maps wavenumbers of shape (n,) to relative power per wavenumber. ``reach_m`` is the
    path difference beyond which the degree of coherence stays below half of ``TOLERANCE``.
    """

    low: float
    high: float
    reach_m: float
    values: FloatArray | None
    shape: str
    parameters: tuple[float, ...]

    def power(self, wavenumber: FloatArray) -> FloatArray:
        """Relative power per wavenumber, shape (n,), not negative."""
        if self.shape == "gaussian":
            centre, fwhm = self.parameters
            return np.exp(-4.0 * math.log(2.0) * ((wavenumber - centre) / fwhm) ** 2)
        if self.shape == "lorentzian":
            centre, fwhm = self.parameters
            return 1.0 / (1.0 + (2.0 * (wavenumber - centre) / fwhm) ** 2)
        if self.shape == "blackbody":
            (temperature_k,) = self.parameters
            exponent = SECOND_RADIATION_M_K * wavenumber / temperature_k
            # Planck's law for one unit of wavenumber; the height does not matter here.
            return np.asarray((wavenumber / self.high) ** 3 / np.expm1(exponent))
        if self.values is not None:
            wavelength_m = 1.0 / wavenumber
            tabulated = np.interp(wavelength_m, self.values[0], self.values[1])
            return np.asarray(tabulated * wavelength_m**2)
        return np.ones_like(wavenumber)


def lamp(spectrum: Mapping[str, Any]) -> Lamp:
    """The spectrum of a source as the bench describes it.

    The analytic shapes have their half-power points at the wavelengths ``centre_m`` plus and minus
    half of ``fwhm_m`` and are symmetric in wavenumber; ``fwhm_hz`` may give the width instead.
    Raises ValueError where the description makes no spectrum.
    """
    if "wavelength_m" in spectrum:
        return _tabulated(spectrum)
    shape = str(spectrum["shape"])
    if shape == "blackbody":
        band_m = sorted(float(edge) for edge in spectrum["band_m"])
        low, high = 1.0 / band_m[1], 1.0 / band_m[0]
        _require(0.0 < low < high, "the band of a blackbody needs two different wavelengths")
        temperature_k = float(spectrum["temperature_k"])
        _require(temperature_k > 0.0, f"a blackbody of {temperature_k} K does not shine")
        return Lamp(low, high, _edge_reach_m(high - low), None, shape, (temperature_k,))
    centre_m = float(spectrum["centre_m"])
    if spectrum.get("fwhm_hz") is not None:
        centre, fwhm = 1.0 / centre_m, float(spectrum["fwhm_hz"]) / LIGHT_M_PER_S
    else:
        half_m = 0.5 * float(spectrum["fwhm_m"])
        _require(0.0 < half_m < centre_m, "a width must be positive and narrower than 2 x centre")
        # 1 / (centre - half) -+ 1 / (centre + half), without the digits that a laser would lose.
        product = (centre_m - half_m) * (centre_m + half_m)
        centre, fwhm = centre_m / product, 2.0 * half_m / product
    _require(fwhm > 0.0, "a spectrum needs a positive width")
    fwhm = max(fwhm, _NARROWEST)
    edges = (0.4 * centre, 2.5 * centre)  # no optics passes more than that
    faint = math.log(2.0 / TOLERANCE)
    if shape == "gaussian":
        half = 2.6 * fwhm  # 1e-8 of the peak
        reach_m = 2.0 * math.sqrt(math.log(2.0) * faint) / (math.pi * fwhm)
    elif shape == "lorentzian":
        half = 4000.0 * fwhm  # leaves out 0.8e-4 of the power
        reach_m = faint / (math.pi * fwhm)
        if centre + half > edges[1] or centre - half < edges[0]:
            reach_m = max(reach_m, _edge_reach_m(edges[1] - edges[0]))
    elif shape == "rectangular":
        half = 0.5 * fwhm
        reach_m = _edge_reach_m(fwhm)
    else:
        raise ValueError(f"no spectrum has the shape {shape!r}")
    low, high = max(centre - half, edges[0]), min(centre + half, edges[1])
    return Lamp(low, high, reach_m, None, shape, (centre, fwhm))


def _tabulated(spectrum: Mapping[str, Any]) -> Lamp:
    wavelength_m = np.asarray(spectrum["wavelength_m"], dtype=np.float64)
    power = np.asarray(spectrum["power"], dtype=np.float64)
    order = np.argsort(wavelength_m)
    wavelength_m, power = wavelength_m[order], np.clip(power[order], 0.0, None)
    lit = np.flatnonzero(power)
    _require(lit.size > 0 and wavelength_m[0] > 0.0, "a tabulated spectrum holds no light")
    first, last = max(lit[0] - 1, 0), min(lit[-1] + 1, power.size - 1)
    _require(first < last, "a tabulated spectrum needs two wavelengths")
    low, high = 1.0 / wavelength_m[last], 1.0 / wavelength_m[first]
    # A line as narrow as the table's own spacing keeps its coherence over one period of it.
    finest = float(np.min(np.abs(np.diff(1.0 / wavelength_m[first : last + 1]))))
    reach_m = max(_edge_reach_m(high - low), 3.0 / max(finest, 1e-9))
    limit_m = _MOST_POINTS / (2.5 * _OVERSAMPLING * (high - low))
    values = np.stack([wavelength_m, power])
    return Lamp(low, high, min(reach_m, limit_m), values, "tabulated", ())


def _edge_reach_m(width: float) -> float:
    """Where the slow tail that a sharp edge leaves, 1 / (pi width D), is faint; doubled for safety
    because an edge may stand higher than the mean."""
    return 2.0 * 2.0 / (math.pi * width * TOLERANCE)


def _require(condition: bool, message: str) -> None:
    if not condition:
        raise ValueError(message)


@dataclass(frozen=True)
class Packet:
    """White-light fringes of one source through one imbalance.

    ``table`` holds the complex envelope at the path differences ``start_m + k step_m``; ``carrier``
    is the mean wavenumber, 1/m.
    """

    carrier: float
    start_m: float
    step_m: float
    table: ComplexArray

    def fringes(self, opd_m: FloatArray, phase_rad: float = 0.0) -> FloatArray:
        """Fringes between -1 and 1 at ``opd_m`` of any shape, within ``TOLERANCE``."""
        place = (opd_m - self.start_m) / self.step_m
        inside = (place >= 1.0) & (place < self.table.size - 2)
        if not inside.any():
            return np.zeros_like(opd_m)
        if inside.all():
            return self._read(opd_m, place, phase_rad)
        out = np.zeros_like(opd_m)
        out[inside] = self._read(opd_m[inside], place[inside], phase_rad)
        return out

    def _read(self, opd_m: FloatArray, place: FloatArray, phase_rad: float) -> FloatArray:
        k = place.astype(np.intp)
        u = place - k
        before, after, beyond = u + 1.0, u - 1.0, u - 2.0
        envelope = (
            self.table[k - 1] * (-u * after * beyond / 6.0)
            + self.table[k] * (before * after * beyond / 2.0)
            + self.table[k + 1] * (-before * u * beyond / 2.0)
            + self.table[k + 2] * (before * u * after / 6.0)
        )
        angle = 2.0 * math.pi * self.carrier * opd_m + phase_rad
        return np.asarray(envelope.real * np.cos(angle) - envelope.imag * np.sin(angle))


def packet(
    source: Lamp, glass: Glass | None = None, thickness_m: float = 0.0, air_index: float = 1.0
) -> Packet:
    """Integrate over ``source`` with ``thickness_m`` of ``glass`` more in arm A than in arm B.

    The glass displaces air and its catalogue index is relative to air, so it adds
    ``thickness (n - 1) air_index`` to the path.
    """
    width = source.high - source.low
    reach_m, centre_m = source.reach_m, 0.0
    if glass is not None and thickness_m:
        ends = glass.group_index(np.linspace(source.low, source.high, 257)) - 1.0
        delays_m = -thickness_m * air_index * ends
        centre_m = 0.5 * float(delays_m.min() + delays_m.max())
        reach_m += 0.5 * float(np.ptp(delays_m))
    # Twice the reach is tabulated; the rest of the period keeps the transform's images away.
    cells = max(64, math.ceil(2.5 * reach_m * width))
    size = 1 << math.ceil(math.log2(_OVERSAMPLING * cells))
    spacing = width / cells
    wavenumber: FloatArray = np.asarray(
        source.low + spacing * (np.arange(cells) + 0.5), dtype=np.float64
    )
    weight = source.power(wavenumber)
    weight /= weight.sum()
    carrier = float(weight @ wavenumber)
    turns = (wavenumber - carrier) * centre_m
    if glass is not None and thickness_m:
        turns += wavenumber * thickness_m * air_index * (glass.index(wavenumber) - 1.0)
    step_m = 1.0 / (size * spacing)
    transform = np.fft.ifft(weight * np.exp(2j * math.pi * turns), size) * size
    half = min(size // 2 - 1, math.ceil(reach_m / step_m) + 2)
    order = np.arange(-half, half + 1)
    table = transform[order] * np.exp(2j * math.pi * (wavenumber[0] - carrier) * order * step_m)
    return Packet(carrier, centre_m - half * step_m, step_m, table)
