"""Refractive indices of the glasses that a simulated imbalance can be made of.

The coefficients of a three-term Sellmeier equation, ``n^2 - 1 = sum B l^2 / (l^2 - C)`` with the
vacuum wavelength ``l`` in micrometres, give the index relative to air, as glass catalogues do; see
Malitson 1965, J. Opt. Soc. Am. 55, 1205 (fused silica) and Malitson 1963, Appl. Opt. 2, 1103
(calcium fluoride). The optical glasses are catalogue values.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["GLASSES", "Glass"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Glass:
    """``b`` without unit and ``c_um2`` in square micrometres; ``band_um`` where they hold."""

    b: tuple[float, float, float]
    c_um2: tuple[float, float, float]
    band_um: tuple[float, float]

    def index(self, wavenumber: FloatArray) -> FloatArray:
        """Index at vacuum ``wavenumber`` (1/m), shape (n,).

        Outside ``band_um`` the value at the band's end is used: the far wings of a spectrum carry
        no power worth a pole of the formula.
        """
        squared = self._wavelength_um(wavenumber) ** 2
        terms = [b * squared / (squared - c) for b, c in zip(self.b, self.c_um2, strict=True)]
        return np.asarray(np.sqrt(1.0 + sum(terms)))

    def group_index(self, wavenumber: FloatArray) -> FloatArray:
        """``n - l dn/dl`` at vacuum ``wavenumber`` (1/m), shape (n,)."""
        squared = self._wavelength_um(wavenumber) ** 2
        index = self.index(wavenumber)
        pairs = zip(self.b, self.c_um2, strict=True)
        slope = sum(b * c * squared / (squared - c) ** 2 for b, c in pairs)
        return np.asarray(index + slope / index)

    def _wavelength_um(self, wavenumber: FloatArray) -> FloatArray:
        return np.clip(1e6 / np.asarray(wavenumber, dtype=np.float64), *self.band_um)


GLASSES: dict[str, Glass] = {
    "N-BK7": Glass(
        (1.03961212, 0.231792344, 1.01046945),
        (0.00600069867, 0.0200179144, 103.560653),
        (0.30, 2.5),
    ),
    "fused silica": Glass(
        (0.6961663, 0.4079426, 0.8974794),
        (0.0684043**2, 0.1162414**2, 9.896161**2),
        (0.21, 3.7),
    ),
    "CaF2": Glass(
        (0.5675888, 0.4710914, 3.8484723),
        (0.050263605**2, 0.1003909**2, 34.649040**2),
        (0.23, 9.7),
    ),
    "F2": Glass(
        (1.34533359, 0.209073176, 0.937357162),
        (0.00997743871, 0.0470450767, 111.886764),
        (0.32, 2.5),
    ),
    "N-SF11": Glass(
        (1.73759695, 0.313747346, 1.89878101),
        (0.013188707, 0.0623068142, 155.23629),
        (0.37, 2.5),
    ),
}
