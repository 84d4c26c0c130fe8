"""The phase that unequal glass leaves in a spectrum, with its constant and its slope taken out.

What is left has no value and no slope at the reference frequency, so it cannot pass for a shift of
the group zero there.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from bench.fringes.model import FloatArray

SPEED_OF_LIGHT_M_S = 299792458.0
TWO_PI = 2.0 * np.pi
VISIBLE_M = (400e-9, 950e-9)


@dataclass(frozen=True)
class Dispersion:
    """``bend`` times ``curve(f)`` is a phase in radians.

    One unit of bend is about half a radian at the spectrum's rms half-width. ``fs2_per_bend`` and
    ``m_per_bend`` (of ``material``) are None where the scan's axis has no known length.
    ``beyond`` is the part of ``curve`` above second order where the glass is only assumed.
    """

    curve: Callable[[FloatArray], FloatArray]
    material: str | None = None
    m_per_bend: float | None = None
    fs2_per_bend: float | None = None
    beyond: Callable[[FloatArray], FloatArray] | None = None


def second_order(reference: float, scale: float, per_m: float | None) -> Dispersion:
    """phase = bend / 2 ((f - reference) / scale)^2; ``per_m`` is OPD in metres a unit of x.

    Group delay dispersion is d2(phase)/d(omega)^2 with omega = 2 pi c f / per_m.
    """

    def curve(frequency: FloatArray) -> FloatArray:
        return np.asarray(0.5 * ((frequency - reference) / scale) ** 2, dtype=np.float64)

    if per_m is None:
        return Dispersion(curve)
    per_omega = per_m / (TWO_PI * SPEED_OF_LIGHT_M_S) / scale
    return Dispersion(curve, fs2_per_bend=per_omega**2 * 1e30)


def some_glass(reference: float, scale: float, per_m: float) -> Dispersion:
    """Where no material is named: a crown glass in the visible, second order elsewhere.

    The third order of common optical glasses is 0.4 to 0.6 fs times their second in the visible, so
    any of them says more of the phase than second order alone; ``beyond`` tells how much more.
    """
    wavelength_m = per_m / reference
    if not VISIBLE_M[0] < wavelength_m < VISIBLE_M[1]:
        return second_order(reference, scale, per_m)
    known = of_glass("N-BK7", reference, scale, per_m)
    plain = second_order(reference, scale, per_m)

    def beyond(frequency: FloatArray) -> FloatArray:
        return np.asarray(known.curve(frequency) - plain.curve(frequency), dtype=np.float64)

    return Dispersion(known.curve, fs2_per_bend=known.fs2_per_bend, beyond=beyond)


def of_glass(material: str, reference: float, scale: float, per_m: float) -> Dispersion:
    """The phase of a path in ``material``: 2 pi sigma n(sigma) less its value and slope.

    Raises ValueError for a material without a formula.
    """
    from bench.optics import glass

    entry = glass.material(material)
    low_m, high_m = entry.range_m

    def waves(frequency: FloatArray) -> FloatArray:
        wavenumber = frequency / per_m
        wavelength = np.clip(1.0 / np.maximum(wavenumber, 1e-3), low_m, high_m)
        return np.asarray(TWO_PI * wavenumber * glass.index(material, wavelength), dtype=np.float64)

    wavelength_m = float(np.clip(per_m / reference, low_m, high_m))
    at = float(waves(np.array([reference]))[0])
    slope = float(TWO_PI * glass.group_index(material, wavelength_m) / per_m)
    gdd_s2 = float(glass.gvd_s2_per_m(material, wavelength_m))
    # d2(phase)/df2 of a metre of glass, for a bend of natural size
    second = gdd_s2 * (TWO_PI * SPEED_OF_LIGHT_M_S / per_m) ** 2 * scale**2
    thickness = 1.0 / second if abs(second) > 1e-30 else 1.0

    def curve(frequency: FloatArray) -> FloatArray:
        away = frequency - reference
        return np.asarray((waves(frequency) - at - slope * away) * thickness, dtype=np.float64)

    return Dispersion(
        curve,
        material=entry.name,
        m_per_bend=thickness,
        fs2_per_bend=gdd_s2 * thickness * 1e30,
    )
