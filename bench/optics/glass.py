"""Refractive index, group index and dispersion of optical glasses.

Sellmeier's formula n^2 - 1 = sum of B w^2 / (w^2 - C) with the wavelength w in micrometres.
Catalogue indices are relative to air at about 20 C, and the derivatives below are taken of the
formula itself, not of differences.
"""

from __future__ import annotations

import difflib
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import ArrayLike

FloatArray = NDArray[np.float64]

__all__ = [
    "MATERIALS",
    "Material",
    "UnknownMaterial",
    "group_index",
    "gvd_s2_per_m",
    "index",
    "material",
    "tod_s3_per_m",
]

SPEED_OF_LIGHT_M_S = 299792458.0


class UnknownMaterial(ValueError, KeyError):
    """A material that is not in the table; the message names the nearest that is."""

    def __str__(self) -> str:
        return str(self.args[0])


@dataclass(frozen=True)
class Material:
    """Sellmeier coefficients: ``b`` without unit, ``c`` in um^2; ``range_m`` where they hold."""

    name: str
    b: tuple[float, float, float]
    c: tuple[float, float, float]
    range_m: tuple[float, float]
    source: str


MATERIALS: Mapping[str, Material] = {
    entry.name: entry
    for entry in (
        Material(
            "N-BK7",
            (1.03961212, 0.231792344, 1.01046945),
            (0.00600069867, 0.0200179144, 103.560653),
            (0.3e-6, 2.5e-6),
            "glass catalogue",
        ),
        Material(
            "fused silica",
            (0.6961663, 0.4079426, 0.8974794),
            (0.0684043**2, 0.1162414**2, 9.896161**2),
            (0.21e-6, 3.71e-6),
            "Malitson 1965, J. Opt. Soc. Am. 55, 1205",
        ),
        Material(
            "CaF2",
            (0.5675888, 0.4710914, 3.8484723),
            (0.050263605**2, 0.1003909**2, 34.649040**2),
            (0.23e-6, 9.7e-6),
            "Malitson 1963, Appl. Opt. 2, 1103",
        ),
        Material(
            "N-SF11",
            (1.73759695, 0.313747346, 1.89878101),
            (0.013188707, 0.0623068142, 155.23629),
            (0.37e-6, 2.5e-6),
            "glass catalogue",
        ),
    )
}


def material(name: str) -> Material:
    """The material of that name; case, spaces and hyphens do not count.

    Raises UnknownMaterial (a ValueError and a KeyError) that names the nearest known one.
    """
    wanted = _plain(name)
    known = {_plain(key): entry for key, entry in MATERIALS.items()}
    if wanted in known:
        return known[wanted]
    near = difflib.get_close_matches(wanted, known, n=1, cutoff=0.0)
    raise UnknownMaterial(
        f"material {name!r} is not known; the nearest known is {known[near[0]].name!r}"
        f" (known: {', '.join(MATERIALS)})"
    )


def _plain(name: str) -> str:
    return name.lower().replace("-", "").replace(" ", "").replace("_", "")


def index(name: str, wavelength_m: ArrayLike) -> FloatArray:
    """Refractive index at vacuum wavelengths, any shape.

    Raises UnknownMaterial, and ValueError for wavelengths outside the material's range.
    """
    return _derivatives(name, wavelength_m)[0]


def group_index(name: str, wavelength_m: ArrayLike) -> FloatArray:
    """Group index n - w dn/dw at vacuum wavelengths, any shape; raises as ``index``."""
    n, first, _, _ = _derivatives(name, wavelength_m)
    return n - np.asarray(wavelength_m, dtype=np.float64) * 1e6 * first


def gvd_s2_per_m(name: str, wavelength_m: ArrayLike) -> FloatArray:
    """Group velocity dispersion w^3 / (2 pi c^2) d2n/dw2 in s^2/m (1 fs^2/mm = 1e-27 s^2/m)."""
    _, _, second, _ = _derivatives(name, wavelength_m)
    wavelength = np.asarray(wavelength_m, dtype=np.float64)
    result: FloatArray = wavelength**3 * (second * 1e12) / (2.0 * np.pi * SPEED_OF_LIGHT_M_S**2)
    return result


def tod_s3_per_m(name: str, wavelength_m: ArrayLike) -> FloatArray:
    """Third-order dispersion -w^4 / (4 pi^2 c^3) (3 d2n/dw2 + w d3n/dw3) in s^3/m."""
    _, _, second, third = _derivatives(name, wavelength_m)
    wavelength = np.asarray(wavelength_m, dtype=np.float64)
    bracket = 3.0 * second + wavelength * 1e6 * third
    result: FloatArray = (
        -(wavelength**4) * bracket * 1e12 / (4.0 * np.pi**2 * SPEED_OF_LIGHT_M_S**3)
    )
    return result


def _derivatives(
    name: str, wavelength_m: ArrayLike
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """n and its first three derivatives by the wavelength in um."""
    glass = material(name)
    wavelength = np.asarray(wavelength_m, dtype=np.float64)
    low, high = glass.range_m
    if not np.all((wavelength >= low) & (wavelength <= high)):
        raise ValueError(
            f"the index of {glass.name} is known from {low * 1e9:.0f} to {high * 1e9:.0f} nm only"
        )
    w = wavelength * 1e6
    square = w**2
    f = np.ones_like(w)
    f1, f2, f3 = np.zeros_like(w), np.zeros_like(w), np.zeros_like(w)  # by the square of w
    for b, c in zip(glass.b, glass.c, strict=True):
        gap = square - c
        f = f + b * square / gap
        f1 = f1 - b * c / gap**2
        f2 = f2 + 2.0 * b * c / gap**3
        f3 = f3 - 6.0 * b * c / gap**4
    n = np.sqrt(f)
    first = w * f1 / n
    second = (f1 + 2.0 * square * f2 - first**2) / n
    third = (6.0 * w * f2 + 4.0 * w**3 * f3 - 3.0 * first * second) / n
    return n, first, second, third
