"""Degree of coherence of a spectrum, and its three coherence lengths."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from bench.optics.spectra import Spectrum

if TYPE_CHECKING:
    from numpy.typing import ArrayLike

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

__all__ = ["Lengths", "coherence_lengths", "degree_of_coherence", "fourier"]

_BLOCK = 1 << 19  # elements of one block of the transform, to bound the memory


@dataclass(frozen=True)
class Lengths:
    """Coherence lengths of a source, in metres of OPD.

    ``rule_m`` is l1 l2 / (l2 - l1) at the outermost half-power wavelengths; ``fwhm_m`` the full
    width at half maximum of the central peak of the modulus of the degree of coherence;
    ``integral_m`` the integral of that modulus squared (Mandel 1959, Proc. Phys. Soc. 74, 233).
    """

    rule_m: float
    fwhm_m: float
    integral_m: float


def fourier(
    wavenumber: FloatArray, amplitude: FloatArray | ComplexArray, opd_m: FloatArray, centre: float
) -> ComplexArray:
    """Integral of a(s) exp(2 pi i (s - centre) opd) ds for a(s) linear between its samples.

    ``wavenumber`` and ``amplitude`` (real or complex) have shape (n,), the result the shape of
    ``opd_m``. Exact for every OPD: over a segment of width h about s the integral is
    h exp(i f s) [mean sin(u)/u + i difference/2 (sin u - u cos u)/u^2], f = 2 pi opd, u = f h / 2.
    """
    flat = np.ravel(opd_m)
    step = np.diff(wavenumber)
    middle = (wavenumber[1:] + wavenumber[:-1]) / 2.0 - centre
    mean = step * (amplitude[1:] + amplitude[:-1]) / 2.0
    slope = step * (amplitude[1:] - amplitude[:-1]) / 2.0
    result = np.empty(flat.size, dtype=np.complex128)
    rows = max(1, _BLOCK // step.size)
    for begin in range(0, flat.size, rows):
        part = slice(begin, begin + rows)
        turn = np.pi * flat[part, None] * step
        turn_or_one = np.where(turn == 0.0, 1.0, turn)
        even = np.where(turn == 0.0, 1.0, np.sin(turn) / turn_or_one)
        # The closed form of the odd part cancels for small turns; three terms are exact there.
        small = np.abs(turn) < 0.05
        safe = np.where(small, 1.0, turn)
        odd = np.where(
            small,
            turn / 3.0 * (1.0 - turn**2 / 10.0 + turn**4 / 280.0),
            (even - np.cos(turn)) / safe,
        )
        wave = np.exp(2j * np.pi * flat[part, None] * middle)
        result[part] = np.sum(wave * (even * mean + 1j * odd * slope), axis=1)
    return result.reshape(np.shape(opd_m))


def degree_of_coherence(spectrum: Spectrum, opd_m: ArrayLike) -> ComplexArray:
    """Complex degree of coherence at each OPD (shape (n,), metres), carrier included.

    Normalised Fourier transform of the power over wavenumber (Wiener-Khintchine); 1 at zero OPD.
    """
    opd = np.asarray(opd_m, dtype=np.float64)
    centre = spectrum.mean_wavenumber
    envelope = fourier(spectrum.wavenumber, spectrum.power, opd, centre) / spectrum.total_power
    return np.asarray(envelope * np.exp(2j * np.pi * centre * opd), dtype=np.complex128)


def coherence_lengths(spectrum: Spectrum) -> Lengths:
    """The three coherence lengths of a source; see ``Lengths``.

    ``fwhm_m`` is not a number where the modulus does not fall to one half within 100 times
    ``rule_m``, which no spectrum of one piece does.
    """
    low, high = spectrum.half_power_band
    rule = 1.0 / (high - low)
    step = np.diff(spectrum.wavenumber)
    left, right = spectrum.power[:-1], spectrum.power[1:]
    # Parseval: the integral of |g|^2 over OPD is that of the normalised power squared.
    squared = float(np.sum(step * (left**2 + left * right + right**2)) / 3.0)
    return Lengths(
        rule_m=rule,
        fwhm_m=2.0 * _half_level(spectrum, rule),
        integral_m=squared / spectrum.total_power**2,
    )


def _half_level(spectrum: Spectrum, rule_m: float) -> float:
    """Smallest OPD where the modulus of the degree of coherence is one half."""
    centre, total = spectrum.mean_wavenumber, spectrum.total_power

    def modulus(opd_m: FloatArray) -> FloatArray:
        return np.abs(fourier(spectrum.wavenumber, spectrum.power, opd_m, centre)) / total

    begin = 0.0
    while begin < 100.0 * rule_m:
        grid = begin + rule_m * np.linspace(0.0, 1.0, 51)
        below = np.flatnonzero(modulus(grid) < 0.5)
        if below.size:
            low, high = float(grid[below[0] - 1]), float(grid[below[0]])
            for _ in range(6):  # ten parts each time: 1e-6 of a fiftieth
                fine = np.linspace(low, high, 11)
                index = int(np.flatnonzero(modulus(fine) < 0.5)[0])
                low, high = float(fine[index - 1]), float(fine[index])
            return (low + high) / 2.0
        begin = float(grid[-1])
    return float("nan")
