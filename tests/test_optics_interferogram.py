"""The interferogram of a spectrum, with and without glass, against closed forms."""

from __future__ import annotations

import math

import numpy as np
import pytest

from bench.optics import glass
from bench.optics.coherence import degree_of_coherence, fourier
from bench.optics.interferogram import interferogram
from bench.optics.spectra import Spectrum, gaussian

LIGHT_M_S = 299792458.0


def _envelope(spectrum, opd, **kwargs):
    real = interferogram(spectrum, opd, **kwargs)
    phase = kwargs.pop("phase_rad", 0.0) - math.pi / 2.0
    return np.hypot(real, interferogram(spectrum, opd, phase_rad=phase, **kwargs))


def test_without_glass_it_is_the_degree_of_coherence():
    spectrum = gaussian(600e-9, 60e-9)
    opd = np.linspace(-8e-6, 8e-6, 301)
    expected = np.real(degree_of_coherence(spectrum, opd) * np.exp(0.7j))
    np.testing.assert_allclose(interferogram(spectrum, opd, phase_rad=0.7), expected, atol=1e-12)


def test_a_phase_of_half_a_turn_makes_the_centre_dark():
    value = interferogram(gaussian(600e-9, 60e-9), [0.0], phase_rad=math.pi)
    assert value[0] == pytest.approx(-1.0)


def test_glass_moves_packet_and_carrier():
    """0.1 mm of N-BK7 passed twice at 0.55 um: packet 109.24 um, carrier 103.70 um of OPD.

    From n_g - 1 and n - 1 of the catalogue's formula.
    """
    spectrum = gaussian(550e-9, 6e-9)
    centre_m = spectrum.mean_wavelength_m
    thickness_m = 0.2e-3
    opd = np.linspace(-111e-6, -107.5e-6, 1401)
    envelope = _envelope(spectrum, opd, glass="N-BK7", thickness_m=thickness_m)
    assert -opd[np.argmax(envelope)] == pytest.approx(109.24e-6, abs=0.02e-6)
    carrier_m = (float(glass.index("N-BK7", centre_m)) - 1.0) * thickness_m
    assert carrier_m == pytest.approx(103.70e-6, abs=0.01e-6)
    # At the packet's centre the phase is that of the distance between packet and carrier.
    at = opd[np.argmax(envelope)]
    fringe = interferogram(spectrum, [at], glass="N-BK7", thickness_m=thickness_m)[0]
    assert fringe == pytest.approx(
        envelope.max() * math.cos(2.0 * math.pi * (at + carrier_m) / centre_m), abs=2e-3
    )


def test_dispersion_broadens_the_packet_and_lowers_its_peak():
    """Gaussian power of rms width W, group delay dispersion D: |g| widens by sqrt(1 + (D W^2)^2)
    and falls to (1 + (D W^2)^2)^(-1/4).

    The Gaussian integral of a quadratic phase (field correlation, not intensity). W = 2.38e14 rad/s
    and D = 15.4 fs^2 give widths of 9.894 and 13.13 fs and a peak of 0.86809.
    """
    w, d = 2.38e14, 15.4e-30
    factor = math.sqrt(1.0 + (d * w**2) ** 2)
    assert factor**-0.5 == pytest.approx(0.86809, abs=1e-5)
    centre = 1.0 / 800e-9
    rms = w / (2.0 * math.pi * LIGHT_M_S)
    wavenumber = np.linspace(centre - 6 * rms, centre + 6 * rms, 1201)
    power = np.exp(-(((wavenumber - centre) / rms) ** 2) / 2.0)
    chirp = np.exp(1j * d / 2.0 * (2.0 * math.pi * LIGHT_M_S * (wavenumber - centre)) ** 2)
    total = Spectrum(wavenumber, power).total_power
    delay = np.linspace(-20e-15, 20e-15, 2001)
    for shape, width_fs, peak in ((power, 9.894, 1.0), (power * chirp, 13.13, 0.86809)):
        modulus = np.abs(fourier(wavenumber, shape, delay * LIGHT_M_S, centre)) / total
        assert modulus.max() == pytest.approx(peak, abs=2e-5)
        above = delay[modulus >= modulus.max() / 2.0]
        assert (above[-1] - above[0]) * 1e15 == pytest.approx(width_fs, abs=0.03)


def test_real_glass_broadens_as_its_dispersion_says():
    """The same law with N-BK7's own dispersion: 4 mm at 800 nm, where third order is small."""
    spectrum = gaussian(800e-9, 40e-9)
    thickness_m = 4e-3
    low, high = spectrum.half_power_band
    w = 2.0 * math.pi * LIGHT_M_S * (high - low) / (2.0 * math.sqrt(2.0 * math.log(2.0)))
    d = float(glass.gvd_s2_per_m("N-BK7", spectrum.mean_wavelength_m)) * thickness_m
    expected = (1.0 + (d * w**2) ** 2) ** -0.25
    centre_m = (float(glass.group_index("N-BK7", spectrum.mean_wavelength_m)) - 1.0) * thickness_m
    opd = np.linspace(-centre_m - 1e-6, -centre_m + 1e-6, 401)
    peak = _envelope(spectrum, opd, glass="N-BK7", thickness_m=thickness_m).max()
    assert expected < 0.98
    assert peak == pytest.approx(expected, abs=2e-3)


def test_less_glass_mirrors_more_glass():
    spectrum = gaussian(600e-9, 60e-9)
    opd = np.linspace(-30e-6, 30e-6, 501)
    more = interferogram(spectrum, opd, glass="N-BK7", thickness_m=0.03e-3)
    less = interferogram(spectrum, -opd, glass="N-BK7", thickness_m=-0.03e-3)
    np.testing.assert_allclose(more, less, atol=1e-9)


def test_glass_that_is_missing_or_too_thick():
    spectrum = gaussian(600e-9, 60e-9)
    with pytest.raises(ValueError, match="no material"):
        interferogram(spectrum, [0.0], thickness_m=1e-3)
    with pytest.raises(ValueError, match="too much"):
        interferogram(spectrum, [0.0], glass="N-BK7", thickness_m=10.0)
