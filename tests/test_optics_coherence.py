"""Spectra and degrees of coherence against closed forms, a textbook's table and Planck's law."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from bench.optics.coherence import coherence_lengths, degree_of_coherence
from bench.optics.spectra import (
    Spectrum,
    blackbody,
    gaussian,
    lorentzian,
    rectangular,
    tabulated,
)

LIGHT_M_S = 299792458.0

# Closed forms for a line of FWHM dnu (Mandel 1959, Proc. Phys. Soc. 74, 233; Goodman, Statistical
# Optics; Saleh & Teich, Fundamentals of Photonics): coherence time times dnu, and full width of the
# modulus of the degree of coherence at one half times dnu.
CLOSED_FORMS = [
    (gaussian, 0.664283, 0.882542, 1e-4),
    (lorentzian, 0.318310, 0.441271, 2e-3),  # the wings of a broad line are cut
    (rectangular, 1.0, 1.206709, 1e-5),
]


@pytest.mark.parametrize(("shape", "integral", "half", "tolerance"), CLOSED_FORMS)
@pytest.mark.parametrize(
    ("centre_m", "relative"), [(600e-9, 0.1), (600e-9, 0.3), (633e-9, 1e-3), (1.55e-6, 1e-6)]
)
def test_coherence_lengths_of_simple_lines(shape, integral, half, tolerance, centre_m, relative):
    # A Lorentzian that broad does not exist: it would reach negative wavenumbers.
    fwhm_m = centre_m * (min(relative, 1e-3) if shape is lorentzian else relative)
    lengths = coherence_lengths(shape(centre_m, fwhm_m))
    low_m, high_m = centre_m - fwhm_m / 2, centre_m + fwhm_m / 2
    rule_m = low_m * high_m / (high_m - low_m)
    assert lengths.rule_m == pytest.approx(rule_m, rel=1e-4)
    assert lengths.fwhm_m == pytest.approx(half * rule_m, rel=tolerance)
    assert lengths.integral_m == pytest.approx(integral * rule_m, rel=tolerance)


def test_gaussian_degree_of_coherence_everywhere():
    """|g| = exp(-(pi dnu tau)^2 / (4 ln 2)); the carrier turns once a mean wavelength."""
    spectrum = gaussian(600e-9, 60e-9)
    width = 1.0 / (570e-9 * 630e-9 / 60e-9)
    opd = np.linspace(-12e-6, 12e-6, 501)
    expected = np.exp(-((math.pi * width * opd) ** 2) / (4.0 * math.log(2.0)))
    turning = np.exp(2j * math.pi * opd / spectrum.mean_wavelength_m)
    np.testing.assert_allclose(
        degree_of_coherence(spectrum, opd), expected * turning, atol=3e-5, rtol=0
    )


def test_rectangular_degree_of_coherence_has_its_zeros():
    """|sinc(dnu tau)|: first zero where dnu tau is one, and no packet comes back far away."""
    spectrum = rectangular(600e-9, 60e-9)
    rule_m = 570e-9 * 630e-9 / 60e-9
    opd = rule_m * np.array([0.0, 0.5, 1.0, 2.0, 200.0, 201.5])
    expected = np.abs(np.sinc([0.0, 0.5, 1.0, 2.0, 200.0, 201.5]))
    np.testing.assert_allclose(np.abs(degree_of_coherence(spectrum, opd)), expected, atol=1e-9)


def test_a_triangle_of_three_samples():
    """The transform of a triangle of half width d is sinc^2(d opd): exact from three samples."""
    spectrum = Spectrum(np.array([1.5e6, 1.7e6, 1.9e6]), np.array([0.0, 1.0, 0.0]))
    opd = np.linspace(-40e-6, 40e-6, 161)
    expected = np.sinc(0.2e6 * opd) ** 2 * np.exp(2j * math.pi * 1.7e6 * opd)
    np.testing.assert_allclose(degree_of_coherence(spectrum, opd), expected, atol=1e-10)


def test_a_ramp_of_two_samples():
    """Power rising as 2 (s - a) / h^2 over a width h, by hand: 2 (e^(iz) (1 - iz) - 1) / z^2 with
    z = 2 pi h opd, and the mean two thirds up."""
    start, width = 1.5e6, 0.3e6
    spectrum = Spectrum(np.array([start, start + width]), np.array([0.0, 1.0]))
    opd = np.array([-9e-6, -1e-6, 0.4e-6, 3e-6, 17e-6])
    z = 2.0 * math.pi * width * opd
    expected = 2.0 * (np.exp(1j * z) * (1.0 - 1j * z) - 1.0) / z**2
    expected = expected * np.exp(2j * math.pi * start * opd)
    np.testing.assert_allclose(degree_of_coherence(spectrum, opd), expected, atol=1e-10)
    assert spectrum.mean_wavenumber == pytest.approx(start + 2.0 * width / 3.0, rel=1e-12)


def test_gaussian_by_parseval():
    """sigma 0.05/um about 1.25/um: 5.6419 um, and |g| one half at 3.7478 um of OPD.

    Worked from integral S^2 / (integral S)^2 = 1 / (2 sqrt(pi) sigma) and
    |g| = exp(-2 (pi sigma opd)^2).
    """
    wavenumber = np.linspace(1.0e6, 1.5e6, 2001)
    spectrum = Spectrum(wavenumber, np.exp(-(((wavenumber - 1.25e6) / 0.05e6) ** 2) / 2.0))
    lengths = coherence_lengths(spectrum)
    assert lengths.integral_m == pytest.approx(5.6419e-6, rel=1e-4)
    assert lengths.fwhm_m / 2.0 == pytest.approx(3.7478e-6, rel=1e-4)


@pytest.mark.parametrize(
    ("low_m", "high_m", "width_hz", "length_m"),
    [
        # Saleh & Teich, Fundamentals of Photonics, 2nd ed., Table 11.1-2, from memory.
        (0.4e-6, 0.8e-6, 3.75e14, 800e-9),  # filtered sunlight
        (0.975e-6, 1.025e-6, 1.5e13, 20e-6),  # a light-emitting diode, 1 um and 50 nm
    ],
)
def test_textbook_coherence_lengths(low_m, high_m, width_hz, length_m):
    """The table's length is c over the width, which is our rule."""
    spectrum = rectangular((low_m + high_m) / 2.0, high_m - low_m)
    low, high = spectrum.half_power_band
    assert (high - low) * LIGHT_M_S == pytest.approx(width_hz, rel=0.01)
    assert coherence_lengths(spectrum).rule_m == pytest.approx(length_m, rel=0.01)


@pytest.mark.parametrize(("width_hz", "length_m"), [(1.5e9, 0.20), (1e6, 300.0)])
def test_lasers_of_the_textbook(width_hz, length_m):
    """Multimode and single-mode helium-neon lasers of the same table: 20 cm and 300 m."""
    centre_m = 632.8e-9
    spectrum = gaussian(centre_m, width_hz * centre_m**2 / LIGHT_M_S)
    assert coherence_lengths(spectrum).rule_m == pytest.approx(length_m, rel=0.01)
    assert spectrum.mean_wavelength_m == pytest.approx(centre_m, rel=1e-9)


def test_sodium_doublet_beats():
    """588.995 and 589.592 nm: contrast repeats every 0.5817 mm of OPD (wavelengths from memory)."""
    lines = [gaussian(588.995e-9, 1e-12), gaussian(589.592e-9, 1e-12)]
    wavenumber = np.unique(np.concatenate([line.wavenumber for line in lines]))
    power = sum(
        np.interp(wavenumber, line.wavenumber, line.power, left=0.0, right=0.0) for line in lines
    )
    beat_m = 1.0 / (1.0 / 588.995e-9 - 1.0 / 589.592e-9)
    assert beat_m == pytest.approx(0.5817e-3, rel=1e-4)
    modulus = np.abs(degree_of_coherence(Spectrum(wavenumber, power), [beat_m / 2.0, beat_m]))
    assert modulus[0] < 0.01
    assert modulus[1] > 0.99


def test_black_body_against_illuminant_a():
    """CIE illuminant A is a Planck radiator of 2855.5 K by today's constants (CIE 15).

    Relative power per wavelength: 14.708 at 400 nm, 59.861 at 500, 100 at 560, 129.043 at 600,
    198.261 at 700.
    """
    spectrum = blackbody(2855.50, (380e-9, 780e-9))
    wavelength = np.array([400e-9, 500e-9, 560e-9, 600e-9, 700e-9])
    per_wavelength = np.interp(1.0 / wavelength, spectrum.wavenumber, spectrum.power)
    per_wavelength = per_wavelength / wavelength**2
    np.testing.assert_allclose(
        100.0 * per_wavelength / per_wavelength[2],
        [14.7080, 59.8611, 100.0, 129.043, 198.261],
        rtol=1e-4,
    )


def test_black_body_peaks_where_wien_says():
    """Wien's displacement, 2.897771955e-3 m K, holds for power per wavelength."""
    spectrum = blackbody(3000.0, (300e-9, 4e-6))
    per_wavelength = spectrum.power * spectrum.wavenumber**2
    peak_m = 1.0 / spectrum.wavenumber[np.argmax(per_wavelength)]
    assert peak_m * 3000.0 == pytest.approx(2.897771955e-3, rel=5e-3)


def test_tabulated_is_the_same_light_per_wavelength():
    """The same Gaussian, written per wavelength in falling order, has the same lengths."""
    spectrum = gaussian(600e-9, 60e-9)
    wavelength = 1.0 / spectrum.wavenumber
    again = tabulated(wavelength, spectrum.power / wavelength**2)
    assert coherence_lengths(again).fwhm_m == pytest.approx(
        coherence_lengths(spectrum).fwhm_m, rel=1e-9
    )
    assert again.mean_wavenumber == pytest.approx(spectrum.mean_wavenumber, rel=1e-12)


def test_astronomical_band_by_the_rule():
    """Centre squared over width: V, 0.551 and 0.088 um, 3.45 um; H, 1.63 and 0.307 um, 8.65 um.

    Centres and widths from Binney & Merrifield, Galactic Astronomy, Table 2.1 (from memory); that
    the quotient is called the coherence length is common practice, no source.
    """
    for centre_m, fwhm_m, expected_m in (
        (0.551e-6, 0.088e-6, 3.45e-6),
        (1.63e-6, 0.307e-6, 8.65e-6),
    ):
        assert centre_m**2 / fwhm_m == pytest.approx(expected_m, rel=2e-3)
        # The exact edges differ from it by a quarter of the relative width squared.
        rule_m = coherence_lengths(rectangular(centre_m, fwhm_m)).rule_m
        correction = 1.0 - (fwhm_m / centre_m) ** 2 / 4.0
        assert rule_m == pytest.approx(centre_m**2 / fwhm_m * correction, rel=1e-6)


def test_mean_wavelength_is_the_carrier():
    """One over the mean wavenumber, not the centre in wavelength: 598.5 nm for 570 to 630 nm."""
    expected_m = 2.0 / (1.0 / 570e-9 + 1.0 / 630e-9)
    assert gaussian(600e-9, 60e-9).mean_wavelength_m == pytest.approx(expected_m, rel=1e-9)


@given(
    centre_m=st.floats(300e-9, 3e-6),
    relative=st.floats(1e-6, 0.3),
    shape=st.sampled_from([gaussian, lorentzian, rectangular]),
)
def test_half_power_points_stand_where_they_were_asked_for(centre_m, relative, shape):
    low, high = shape(centre_m, relative * centre_m).half_power_band
    width = centre_m * relative
    assert 1.0 / high == pytest.approx(centre_m - width / 2.0, abs=1e-3 * width)
    assert 1.0 / low == pytest.approx(centre_m + width / 2.0, abs=1e-3 * width)


@given(opd=st.lists(st.floats(-1e-3, 1e-3), min_size=1, max_size=5))
def test_degree_of_coherence_is_hermitian_and_never_above_one(opd):
    spectrum = rectangular(600e-9, 60e-9)
    forward = degree_of_coherence(spectrum, opd)
    backward = degree_of_coherence(spectrum, -np.array(opd))
    assert np.all(np.abs(forward) <= 1.0 + 1e-9)
    np.testing.assert_allclose(forward, np.conj(backward), atol=1e-9)


@pytest.mark.parametrize(
    ("wavenumber", "power"),
    [
        ([1e6], [1.0]),
        ([1e6, 2e6], [1.0]),
        ([2e6, 1e6], [1.0, 1.0]),
        ([-1e6, 1e6], [1.0, 1.0]),
        ([1e6, 2e6], [0.0, 0.0]),
        ([1e6, 2e6], [1.0, -1.0]),
        ([1e6, float("nan")], [1.0, 1.0]),
    ],
)
def test_spectra_that_are_none(wavenumber, power):
    with pytest.raises(ValueError, match=r"spectr|wavenumbers"):
        Spectrum(np.array(wavenumber), np.array(power))


@pytest.mark.parametrize("shape", [gaussian, lorentzian, rectangular])
@pytest.mark.parametrize(
    ("centre_m", "fwhm_m"), [(0.0, 1e-9), (600e-9, 0.0), (600e-9, 1.3e-6), (600e-9, float("nan"))]
)
def test_shapes_that_cannot_be(shape, centre_m, fwhm_m):
    with pytest.raises(ValueError, match=r"spectrum|wavelength"):
        shape(centre_m, fwhm_m)


def test_tables_that_cannot_be():
    with pytest.raises(ValueError, match="twice"):
        tabulated([500e-9, 500e-9, 600e-9], [1.0, 2.0, 1.0])
    with pytest.raises(ValueError, match="two columns"):
        tabulated([500e-9], [1.0])
    with pytest.raises(ValueError, match="positive"):
        tabulated([-500e-9, 600e-9], [1.0, 1.0])
    with pytest.raises(ValueError, match="positive temperature"):
        blackbody(-3.0, (400e-9, 800e-9))
