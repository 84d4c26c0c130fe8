"""Refractive index and group index of air: Ciddor 1996, Appl. Opt. 35, 1566.

The formula was fitted to measurements from 300 nm to 1690 nm, 0 C to 100 C and 10 kPa to 140 kPa.
It is accepted here from 230 nm to 10 um, where it stays smooth, because a bench needs a length and
not a reason to stop; outside the fitted range the last digits mean little.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from numpy.typing import ArrayLike

FloatArray = NDArray[np.float64]

__all__ = ["group_index", "refractive_index"]

_GAS_CONSTANT = 8.314510  # J/(mol K), as the paper has it
_WATER_MOLAR_MASS = 0.018015  # kg/mol
_ZERO_CELSIUS_K = 273.15


def refractive_index(
    wavelength_m: ArrayLike,
    temperature_c: float,
    pressure_pa: float,
    relative_humidity: float,
    co2_ppm: float = 450.0,
) -> FloatArray:
    """Phase index of air at vacuum wavelengths, any shape.

    ``relative_humidity`` is from 0 to 1. Raises ValueError outside the ranges named above.
    """
    dry, vapour = _weights(temperature_c, pressure_pa, relative_humidity, co2_ppm)
    square = _square(wavelength_m)
    result: FloatArray = 1.0 + dry * _dry(square)[0] + vapour * _vapour(square)[0]
    return result


def group_index(
    wavelength_m: ArrayLike,
    temperature_c: float,
    pressure_pa: float,
    relative_humidity: float,
    co2_ppm: float = 450.0,
) -> FloatArray:
    """Group index n + s dn/ds, s the wavenumber, by the analytic derivative of the phase index.

    Arguments and errors as for ``refractive_index``.
    """
    dry, vapour = _weights(temperature_c, pressure_pa, relative_humidity, co2_ppm)
    square = _square(wavelength_m)
    result: FloatArray = 1.0 + dry * np.add(*_dry(square)) + vapour * np.add(*_vapour(square))
    return result


def _square(wavelength_m: ArrayLike) -> FloatArray:
    """Wavenumber squared in um^-2."""
    wavelength = np.asarray(wavelength_m, dtype=np.float64)
    if not np.all((wavelength >= 0.23e-6) & (wavelength <= 10e-6)):
        raise ValueError("the index of air is known from 230 nm to 10 um only")
    result: FloatArray = (1e-6 / wavelength) ** 2
    return result


def _dry(square: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Refractivity of standard dry air, and its derivative times the wavenumber."""
    k0, k1, k2, k3 = 238.0185, 5792105.0, 57.362, 167917.0
    value = 1e-8 * (k1 / (k0 - square) + k3 / (k2 - square))
    slope = 2e-8 * square * (k1 / (k0 - square) ** 2 + k3 / (k2 - square) ** 2)
    return value, slope


def _vapour(square: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Refractivity of standard water vapour, and its derivative times the wavenumber."""
    w0, w1, w2, w3 = 295.235, 2.6422, -0.032380, 0.004028
    value = 1.022e-8 * (w0 + square * (w1 + square * (w2 + square * w3)))
    slope = 1.022e-8 * square * (2.0 * w1 + square * (4.0 * w2 + square * 6.0 * w3))
    return value, slope


def _weights(
    temperature_c: float, pressure_pa: float, relative_humidity: float, co2_ppm: float
) -> tuple[float, float]:
    """Densities of dry air and vapour over those at which the refractivities are stated."""
    for text, value, low, high in (
        ("temperature in C", temperature_c, 0.0, 100.0),
        ("pressure in Pa", pressure_pa, 1e4, 1.4e5),
        ("relative humidity", relative_humidity, 0.0, 1.0),
        ("carbon dioxide in ppm", co2_ppm, 0.0, 2000.0),
    ):
        if not low <= value <= high:
            raise ValueError(f"{text} of air is {value:g}, and must be from {low:g} to {high:g}")
    kelvin = temperature_c + _ZERO_CELSIUS_K
    air_molar_mass = 1e-3 * (28.9635 + 12.011e-6 * (co2_ppm - 400.0))
    saturated_pa = float(
        np.exp(
            1.2378847e-5 * kelvin**2 - 1.9121316e-2 * kelvin + 33.93711047 - 6.3431645e3 / kelvin
        )
    )
    enhancement = 1.00062 + 3.14e-8 * pressure_pa + 5.6e-7 * temperature_c**2
    vapour_fraction = enhancement * relative_humidity * saturated_pa / pressure_pa

    moles = _moles_per_m3(temperature_c, pressure_pa, vapour_fraction)
    standard_dry = _moles_per_m3(15.0, 101325.0, 0.0) * air_molar_mass
    standard_vapour = _moles_per_m3(20.0, 1333.0, 1.0) * _WATER_MOLAR_MASS
    dry = moles * (1.0 - vapour_fraction) * air_molar_mass / standard_dry
    vapour = moles * vapour_fraction * _WATER_MOLAR_MASS / standard_vapour
    return dry * (1.0 + 0.534e-6 * (co2_ppm - 450.0)), vapour


def _moles_per_m3(temperature_c: float, pressure_pa: float, vapour_fraction: float) -> float:
    """Molar density of moist air with the compressibility of Ciddor's appendix A."""
    t, x = temperature_c, vapour_fraction
    ratio = pressure_pa / (t + _ZERO_CELSIUS_K)
    linear = (
        1.58123e-6
        + t * (-2.9331e-8 + 1.1043e-10 * t)
        + (5.707e-6 - 2.051e-8 * t) * x
        + (1.9898e-4 - 2.376e-6 * t) * x**2
    )
    compressibility = 1.0 - ratio * linear + ratio**2 * (1.83e-11 - 0.765e-8 * x**2)
    return ratio / (compressibility * _GAS_CONSTANT)
