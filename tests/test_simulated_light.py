"""The simulated light against closed forms, published indices and direct integration."""

from __future__ import annotations

import itertools
import math
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from drivers.simulated.glass import GLASSES
from drivers.simulated.light import TOLERANCE, Packet, lamp, packet

FloatArray = NDArray[np.float64]
LIGHT_M_PER_S = 299_792_458.0


def between(shape: str, low: float, high: float) -> dict[str, Any]:
    """A spectrum with its half-power points at the wavenumbers ``low`` and ``high`` (1/m)."""
    return {
        "shape": shape,
        "centre_m": 0.5 * (1.0 / low + 1.0 / high),
        "fwhm_m": 1.0 / low - 1.0 / high,
    }


def modulus(fringes: Packet, opd_m: FloatArray) -> FloatArray:
    return np.hypot(fringes.fringes(opd_m), fringes.fringes(opd_m, -0.5 * math.pi))


def width_at_half(opd_m: FloatArray, height: FloatArray) -> float:
    above = np.flatnonzero(height >= 0.5 * height.max())
    first, last = above[0], above[-1]
    half = 0.5 * height.max()
    left = np.interp(half, height[first - 1 : first + 1], opd_m[first - 1 : first + 1])
    right = np.interp(half, height[last + 1 : last - 1 : -1], opd_m[last + 1 : last - 1 : -1])
    return float(right - left)


# Width of the modulus of the degree of coherence times the spectrum's: Goodman 2015, Statistical
# Optics, 2nd ed., section 5.1, the closed forms evaluated.
@pytest.mark.parametrize(
    ("shape", "width"),
    [("gaussian", 0.882542), ("lorentzian", 0.441271), ("rectangular", 1.206709)],
)
def test_width_of_the_packet(shape: str, width: float) -> None:
    spread = 100.0
    fringes = packet(lamp(between(shape, 1.6e6, 1.6e6 + spread)))
    opd_m = np.linspace(-1.5, 1.5, 20001) / spread
    assert width_at_half(opd_m, modulus(fringes, opd_m)) * spread == pytest.approx(width, rel=2e-4)


def gaussian_coherence(turns: FloatArray) -> FloatArray:
    return np.exp(-((math.pi * turns) ** 2) / (4.0 * math.log(2.0)))


def lorentzian_coherence(turns: FloatArray) -> FloatArray:
    return np.exp(-math.pi * np.abs(turns))


def rectangular_coherence(turns: FloatArray) -> FloatArray:
    return np.abs(np.sinc(turns))


@pytest.mark.parametrize(
    ("shape", "closed"),
    [
        ("gaussian", gaussian_coherence),
        ("lorentzian", lorentzian_coherence),
        ("rectangular", rectangular_coherence),
    ],
)
def test_degree_of_coherence_has_its_closed_form(shape: str, closed: Any) -> None:
    # Same source as above. A Lorentzian is cut far out, which leaves 0.8e-4 of its power away.
    spread = 50.0
    fringes = packet(lamp(between(shape, 1.6e6, 1.6e6 + spread)))
    turns = np.concatenate([np.linspace(-4.0, 4.0, 1201), [30.0, 3e3, 2e4, -1e5]])
    assert np.abs(modulus(fringes, turns / spread) - closed(turns)).max() < 1.5 * TOLERANCE


def test_a_laser_of_one_megahertz_has_fringes_all_along_the_bench() -> None:
    # Coherence length c / width of a single-mode line, 300 m at 1 MHz: Saleh and Teich, 2nd ed.,
    # table 11.1-2 (from memory).
    spectrum = {"shape": "lorentzian", "centre_m": 632.991e-9, "fwhm_hz": 1e6}
    fringes = packet(lamp(spectrum))
    reach_m = np.asarray([0.0, 0.05, 0.5, 300.0 / math.pi])
    expected = np.exp(-math.pi * reach_m * 1e6 / LIGHT_M_PER_S)
    np.testing.assert_allclose(modulus(fringes, reach_m), expected, atol=1e-4)


@pytest.mark.parametrize("fwhm_m", [1e-30, 1.3e-21, 1.3e-18])
def test_no_laser_is_too_narrow(fwhm_m: float) -> None:
    for shape in ("gaussian", "lorentzian", "rectangular"):
        fringes = packet(lamp({"shape": shape, "centre_m": 632.991e-9, "fwhm_m": fwhm_m}))
        opd_m = np.asarray([0.0, 1e-3, 0.3])
        # exp(-pi 0.0033/m 0.3 m) is the least that is left, of a Lorentzian of 1 MHz.
        np.testing.assert_allclose(modulus(fringes, opd_m), 1.0, atol=4e-3)
        turned = fringes.fringes(opd_m) / modulus(fringes, opd_m)
        expected = np.cos(2.0 * math.pi * (opd_m / 632.991e-9 % 1.0))
        np.testing.assert_allclose(turned, expected, atol=1e-3)


def test_sodium_doublet_comes_back() -> None:
    # The yellow lines at 588.995 and 589.592 nm beat over l1 l2 / (l2 - l1) = 0.5817 mm of OPD
    # (wavelengths of the lines from memory; the period is arithmetic).
    first_m, second_m, wing_m = 588.995e-9, 589.592e-9, 2e-12
    wavelength_m = [first_m - wing_m, first_m, first_m + wing_m]
    wavelength_m += [second_m - wing_m, second_m, second_m + wing_m]
    fringes = packet(lamp({"wavelength_m": wavelength_m, "power": [0, 1, 0, 0, 1, 0]}))
    opd_m = np.linspace(0.0, 0.9e-3, 9001)
    height = modulus(fringes, opd_m)
    assert opd_m[np.argmin(height[:4500])] == pytest.approx(0.5 * 0.5817e-3, rel=2e-3)
    assert opd_m[3000 + np.argmax(height[3000:])] == pytest.approx(0.5817e-3, rel=2e-2)
    assert height[np.argmin(np.abs(opd_m - 0.5817e-3))] > 0.9


def test_planck_radiator_is_standard_illuminant_a() -> None:
    # CIE illuminant A (ISO/CIE 11664-2), relative power per wavelength; with today's constants it
    # is a Planck radiator at 2855.50 K.
    table = {400: 14.7080, 500: 59.8611, 560: 100.0, 600: 129.043, 700: 198.261}
    glow = lamp({"shape": "blackbody", "temperature_k": 2855.50, "band_m": (380e-9, 780e-9)})
    wavenumber = 1e9 / np.asarray(list(table), dtype=np.float64)
    per_wavelength = glow.power(wavenumber) * wavenumber**2
    np.testing.assert_allclose(
        100.0 * per_wavelength / per_wavelength[2], list(table.values()), rtol=2e-5
    )


# Sellmeier equations of N-BK7 (glass catalogue) and fused silica (Malitson 1965, J. Opt. Soc. Am.
# 55, 1205), evaluated: wavelength in um, index, group index.
@pytest.mark.parametrize(
    ("material", "wavelength_um", "index", "group_index"),
    [
        ("fused silica", 0.550, 1.4599109, 1.4831073),
        ("fused silica", 0.633, 1.4570121, 1.4753776),
        ("fused silica", 1.550, 1.4440236, 1.4625965),
        ("N-BK7", 0.550, 1.5185224, 1.5461971),
        ("N-BK7", 0.633, 1.5150824, 1.5367420),
        ("N-BK7", 0.800, 1.5107762, 1.5266496),
        ("N-BK7", 1.550, 1.5006520, 1.5200717),
    ],
)
def test_indices(material: str, wavelength_um: float, index: float, group_index: float) -> None:
    wavenumber = np.asarray([1e6 / wavelength_um])
    assert GLASSES[material].index(wavenumber)[0] == pytest.approx(index, abs=6e-8)
    assert GLASSES[material].group_index(wavenumber)[0] == pytest.approx(group_index, abs=6e-8)


# Index at the helium d line and Abbe number: glass catalogues; the last three from memory.
@pytest.mark.parametrize(
    ("material", "index_d", "abbe"),
    [
        ("N-BK7", 1.516800, 64.17),
        ("fused silica", 1.458464, 67.82),
        ("F2", 1.62004, 36.37),
        ("N-SF11", 1.78472, 25.68),
        ("CaF2", 1.43384, 95.23),
    ],
)
def test_index_and_abbe_number_at_the_d_line(material: str, index_d: float, abbe: float) -> None:
    lines_um = np.asarray([0.5875618, 0.4861327, 0.6562725])
    d, f, c = GLASSES[material].index(1e6 / lines_um)
    assert d == pytest.approx(index_d, abs=1e-5)
    assert (d - 1.0) / (f - c) == pytest.approx(abbe, abs=0.3)


def test_glass_moves_packet_and_phase() -> None:
    # A plate of 0.1 mm N-BK7 passed twice, at 0.55 um: the packet moves by thickness (n_g - 1) =
    # 109.24 um and the phase by thickness (n - 1) = 103.70 um (catalogue dispersion formula).
    centre = 1.0 / 0.55e-6
    narrow = lamp(between("gaussian", centre - 5e3, centre + 5e3))
    fringes = packet(narrow, GLASSES["N-BK7"], 0.2e-3)
    opd_m = np.linspace(-260e-6, 40e-6, 60001)
    height = modulus(fringes, opd_m) ** 2
    assert float(opd_m @ height / height.sum()) == pytest.approx(-109.24e-6, abs=0.02e-6)
    near = np.asarray([-103.70e-6])
    phase_rad = math.atan2(fringes.fringes(near, -0.5 * math.pi)[0], fringes.fringes(near)[0])
    assert abs(phase_rad) / (2.0 * math.pi) * 0.55e-6 < 0.01e-6


def test_dispersion_widens_and_lowers_the_packet() -> None:
    # Linear chirp of a Gaussian (Agrawal, Nonlinear Fiber Optics, section 3.2, applied to the field
    # correlation): W = 2.38e14 rad/s and 15.4 fs^2 make 9.894 fs of full width 13.13 fs and leave
    # 0.86809 of the peak. N-BK7 has 77.045 fs^2/mm at 0.55 um.
    spread = 2.0 * math.sqrt(2.0 * math.log(2.0)) * 2.38e14 / (2.0 * math.pi * LIGHT_M_PER_S)
    centre = 1.0 / 0.55e-6
    white = lamp(between("gaussian", centre - 0.5 * spread, centre + 0.5 * spread))
    delay_s = np.linspace(-40e-15, 40e-15, 40001)
    plain = modulus(packet(white), LIGHT_M_PER_S * delay_s)
    assert width_at_half(delay_s, plain) == pytest.approx(9.894e-15, rel=5e-4)
    thickness_m = 15.4 / 77.045 * 1e-3
    shift_m = thickness_m * (1.5461971 - 1.0)
    through = packet(white, GLASSES["N-BK7"], thickness_m)
    chirped = modulus(through, LIGHT_M_PER_S * delay_s - shift_m)
    # Third-order dispersion, which the closed form leaves out, takes its share of a few per mille.
    assert chirped.max() == pytest.approx(0.86809, abs=3e-3)
    assert width_at_half(delay_s, chirped) == pytest.approx(13.13e-15, rel=5e-3)


SPECTRA: dict[str, dict[str, Any]] = {
    "gaussian": {"shape": "gaussian", "centre_m": 600e-9, "fwhm_m": 60e-9},
    "lorentzian": {"shape": "lorentzian", "centre_m": 600e-9, "fwhm_m": 5e-9},
    "rectangular": {"shape": "rectangular", "centre_m": 550e-9, "fwhm_m": 90e-9},
    "lamp": {"shape": "blackbody", "temperature_k": 2856.0, "band_m": (420e-9, 900e-9)},
    "led": {
        "wavelength_m": [430e-9, 450e-9, 470e-9, 500e-9, 560e-9, 620e-9, 700e-9, 420e-9],
        "power": [0.1, 1.0, 0.2, 0.15, 0.6, 0.45, 0.05, 0.0],
    },
}


def slowly(spectrum: dict[str, Any], opd_m: float, glass_m: float, index: Any) -> float:
    """Fringes by brute force: Gauss-Legendre in panels, with formulas written down once more."""
    sellmeier_b = (1.03961212, 0.231792344, 1.01046945)
    sellmeier_c = (0.00600069867, 0.0200179144, 103.560653)
    if spectrum.get("shape") == "blackbody":
        short_m, long_m = spectrum["band_m"]
        edges = [1.0 / long_m, 1.0 / short_m]
    elif "shape" in spectrum:
        low = 1.0 / (spectrum["centre_m"] + 0.5 * spectrum["fwhm_m"])
        high = 1.0 / (spectrum["centre_m"] - 0.5 * spectrum["fwhm_m"])
        middle, width = 0.5 * (low + high), high - low
        reach = {"gaussian": 3.0, "rectangular": 0.5, "lorentzian": 1e9}[spectrum["shape"]] * width
        edges = [max(middle - reach, 0.4 * middle), min(middle + reach, 2.5 * middle)]
    else:
        edges = sorted(1.0 / np.asarray(spectrum["wavelength_m"]))
    nodes, weights = np.polynomial.legendre.leggauss(24)
    top = fringes = 0.0
    for start, stop in itertools.pairwise(edges):
        panels = 40 + int(abs(abs(opd_m) + 2.0 * abs(glass_m)) * (stop - start) / 4.0)
        cuts = np.linspace(start, stop, panels + 1)
        half = 0.5 * np.diff(cuts)[:, None]
        s = (0.5 * (cuts[1:] + cuts[:-1])[:, None] + half * nodes).ravel()
        w = (half * weights).ravel()
        if spectrum.get("shape") == "gaussian":
            power = 0.5 ** ((2.0 * (s - middle) / width) ** 2)
        elif spectrum.get("shape") == "lorentzian":
            power = (0.5 * width) ** 2 / ((s - middle) ** 2 + (0.5 * width) ** 2)
        elif spectrum.get("shape") == "rectangular":
            power = np.ones_like(s)
        elif spectrum.get("shape") == "blackbody":
            hc_over_k = 6.62607015e-34 * LIGHT_M_PER_S / 1.380649e-23
            power = s**3 / (np.exp(hc_over_k * s / spectrum["temperature_k"]) - 1.0) * 1e-18
        else:
            order = np.argsort(spectrum["wavelength_m"])
            at_m = np.asarray(spectrum["wavelength_m"])[order]
            power = np.interp(1.0 / s, at_m, np.asarray(spectrum["power"])[order]) / s**2
        um = np.clip(1e6 / s, 0.3, 2.5)
        squared = 1.0 + sum(
            b * um**2 / (um**2 - c) for b, c in zip(sellmeier_b, sellmeier_c, strict=True)
        )
        phase = 2.0 * math.pi * s * (opd_m + glass_m * index * (np.sqrt(squared) - 1.0)) + 0.7
        top += float(w @ power)
        fringes += float(w @ (power * np.cos(phase)))
    return fringes / top


@pytest.mark.parametrize("thickness_m", [0.0, 0.3e-3, -2e-3])
@pytest.mark.parametrize("name", SPECTRA)
def test_table_agrees_with_direct_integration(name: str, thickness_m: float) -> None:
    index = 1.00027
    quick = packet(lamp(SPECTRA[name]), GLASSES["N-BK7"], thickness_m, index)
    middle_m = -thickness_m * 0.55
    rng = np.random.default_rng(11)
    spread_m = 4e-6 + 0.03 * abs(thickness_m)
    near_m = middle_m + spread_m * rng.standard_normal(60)
    far_m = middle_m + np.asarray([-6e-3, -1e-3, -3e-4, 2e-4, 1.3e-3, 7e-3])
    opd_m = np.concatenate([near_m, far_m])
    slow = np.asarray([slowly(SPECTRA[name], x, thickness_m, index) for x in opd_m])
    assert np.abs(slow).max() > 0.05
    assert np.abs(quick.fringes(opd_m, 0.7) - slow).max() < TOLERANCE


@pytest.mark.parametrize(
    "spectrum",
    [
        {"shape": "triangular", "centre_m": 6e-7, "fwhm_m": 1e-8},
        {"shape": "gaussian", "centre_m": 6e-7, "fwhm_m": 0.0},
        {"shape": "gaussian", "centre_m": 6e-7, "fwhm_m": 1.3e-6},
        {"shape": "blackbody", "temperature_k": 2856.0, "band_m": (5e-7, 5e-7)},
        {"shape": "blackbody", "temperature_k": 0.0, "band_m": (4e-7, 5e-7)},
        {"wavelength_m": [5e-7, 6e-7], "power": [0.0, 0.0]},
    ],
)
def test_what_is_no_spectrum_is_refused(spectrum: dict[str, Any]) -> None:
    with pytest.raises(ValueError, match=r"\w+ \w+"):
        lamp(spectrum)
