"""Air and glass against published tables."""

from __future__ import annotations

import pytest

from bench.optics import air, glass

# Ciddor 1996, Appl. Opt. 35, 1566, table of dry air at 633 nm with 450 ppm CO2: (n - 1) x 1e8.
CIDDOR_TABLE = [
    (20.0, 80e3, 21458.0),
    (20.0, 100e3, 26824.4),
    (20.0, 120e3, 32191.6),
    (10.0, 100e3, 27774.7),
    (30.0, 100e3, 25937.2),
]


@pytest.mark.parametrize(("temperature_c", "pressure_pa", "expected"), CIDDOR_TABLE)
def test_dry_air_of_ciddor(temperature_c, pressure_pa, expected):
    n = air.refractive_index(633e-9, temperature_c, pressure_pa, 0.0)
    assert (float(n) - 1.0) * 1e8 == pytest.approx(expected, abs=0.06)


# Values of the public calculator of a national metrology institute, Ciddor's equation, 450 ppm.
CALCULATOR = [
    (20.0, 101.325e3, 0.0, 633e-9, 1.000271800),
    (20.0, 60e3, 0.0, 633e-9, 1.000160924),
    (50.0, 100e3, 0.0, 633e-9, 1.000243285),
    (5.0, 100e3, 0.0, 633e-9, 1.000282756),
    (20.0, 100e3, 1.0, 633e-9, 1.000267394),
    (40.0, 120e3, 0.75, 633e-9, 1.000299418),
    (20.0, 101.325e3, 0.0, 1700e-9, 1.000268479),
    (20.0, 101.325e3, 0.0, 300e-9, 1.000286581),
]


@pytest.mark.parametrize(
    ("temperature_c", "pressure_pa", "humidity", "wavelength_m", "expected"), CALCULATOR
)
def test_moist_air_of_a_public_calculator(
    temperature_c, pressure_pa, humidity, wavelength_m, expected
):
    n = air.refractive_index(wavelength_m, temperature_c, pressure_pa, humidity)
    assert float(n) == pytest.approx(expected, abs=1.01e-9)


# Phase and group refractivity x 1e8, Ciddor's formula with its analytic derivative (the phase
# formula of Ciddor 1996 differentiated; the derivative printed in Ciddor & Hill 1999, Appl. Opt.
# 38, 1663, has a slip in a sign): at 15 C dry and at 20 C with 50 % humidity, 101325 Pa, 450 ppm.
GROUP = [
    (0.550e-6, 27783.76, 28858.83, 27266.16, 28325.85),
    (0.632991e-6, 27653.03, 28452.67, 27137.29, 27925.64),
    (0.800e-6, 27504.78, 27997.04, 26991.10, 27476.58),
    (1.550e-6, 27326.03, 27454.55, 26814.77, 26941.59),
]


@pytest.mark.parametrize(("wavelength_m", "dry", "dry_group", "moist", "moist_group"), GROUP)
def test_group_index_of_air(wavelength_m, dry, dry_group, moist, moist_group):
    for state, phase, group in (
        ((15.0, 101325.0, 0.0), dry, dry_group),
        ((20.0, 101325.0, 0.5), moist, moist_group),
    ):
        n = float(air.refractive_index(wavelength_m, *state))
        n_g = float(air.group_index(wavelength_m, *state))
        assert (n - 1.0) * 1e8 == pytest.approx(phase, abs=0.06)
        assert (n_g - 1.0) * 1e8 == pytest.approx(group, abs=0.06)


def test_slopes_of_air():
    """At 633 nm, 20 C, 101.325 kPa, 50 %: -0.955e-6 per K, +2.683e-9 per Pa, -0.850e-8 per % RH,
    +1.43e-10 per ppm CO2, from Ciddor's equation."""

    def n(t=20.0, p=101325.0, h=0.5, co2=450.0):
        return float(air.refractive_index(633e-9, t, p, h, co2))

    assert (n(t=20.5) - n(t=19.5)) == pytest.approx(-0.955e-6, rel=2e-3)
    assert (n(p=101375.0) - n(p=101275.0)) / 100.0 == pytest.approx(2.683e-9, rel=2e-3)
    assert (n(h=0.51) - n(h=0.49)) / 2.0 == pytest.approx(-0.850e-8, rel=3e-3)
    assert (n(co2=500.0) - n(co2=400.0)) / 100.0 == pytest.approx(1.43e-10, rel=2e-2)


@pytest.mark.parametrize(
    ("temperature_c", "pressure_kpa", "humidity"), [(15, 95, 20), (25, 101, 60)]
)
def test_air_by_a_rule_of_the_workshop(temperature_c, pressure_kpa, humidity):
    """n = 1 + 7.86e-4 p/(273+t) - 1.5e-11 RH (t^2+160), within 2.1e-8 (formula from memory)."""
    simple = 1.0 + 7.86e-4 * pressure_kpa / (273.0 + temperature_c)
    simple -= 1.5e-11 * humidity * (temperature_c**2 + 160.0)
    n = air.refractive_index(632.991e-9, temperature_c, pressure_kpa * 1e3, humidity / 100.0)
    assert float(n) == pytest.approx(simple, abs=2.1e-8)


def test_iodine_stabilised_laser_in_air():
    """473 612 353 604 kHz: 632.9912126 nm in vacuum, 632.81948 nm in air of 20 C, 101.325 kPa,
    50 % (frequency of the mise en pratique of the metre)."""
    vacuum_m = 299792458.0 / 473612353604e3
    n = float(air.refractive_index(vacuum_m, 20.0, 101325.0, 0.5))
    assert vacuum_m == pytest.approx(632.9912126e-9, abs=1e-16)
    assert vacuum_m / n == pytest.approx(632.81948e-9, abs=6e-15)


@pytest.mark.parametrize(
    "state", [(-5.0, 1e5, 0.5), (20.0, 1.0, 0.5), (20.0, 1e5, 50.0), (20.0, 1e5, float("nan"))]
)
def test_air_that_is_none(state):
    with pytest.raises(ValueError, match="must be from"):
        air.refractive_index(633e-9, *state)


def test_air_beyond_its_wavelengths():
    with pytest.raises(ValueError, match="230 nm"):
        air.group_index(100e-9, 20.0, 101325.0, 0.5)


# Fused silica: Malitson 1965, J. Opt. Soc. Am. 55, 1205; N-BK7: the catalogue's Sellmeier
# coefficients. Values at four wavelengths as three public index libraries give them: n, n_g, GVD in
# fs^2/mm, TOD in fs^3/mm.
GLASSES = [
    ("fused silica", 0.550, 1.4599109, 1.4831073, 62.909, 24.67),
    ("fused silica", 0.633, 1.4570121, 1.4753776, 51.946, 24.37),
    ("fused silica", 0.800, 1.4533173, 1.4671448, 36.162, 27.50),
    ("fused silica", 1.550, 1.4440236, 1.4625965, -27.947, 151.34),
    ("N-BK7", 0.550, 1.5185224, 1.5461971, 77.045, 30.84),
    ("N-BK7", 0.633, 1.5150824, 1.5367420, 63.504, 29.72),
    ("N-BK7", 0.800, 1.5107762, 1.5266496, 44.652, 32.10),
    ("N-BK7", 1.550, 1.5006520, 1.5200717, -24.632, 156.49),
]


@pytest.mark.parametrize(("name", "wavelength_um", "n", "n_g", "gvd", "tod"), GLASSES)
def test_glass(name, wavelength_um, n, n_g, gvd, tod):
    wavelength_m = wavelength_um * 1e-6
    assert float(glass.index(name, wavelength_m)) == pytest.approx(n, abs=6e-8)
    assert float(glass.group_index(name, wavelength_m)) == pytest.approx(n_g, abs=6e-8)
    assert float(glass.gvd_s2_per_m(name, wavelength_m)) * 1e27 == pytest.approx(gvd, abs=6e-4)
    assert float(glass.tod_s3_per_m(name, wavelength_m)) * 1e42 == pytest.approx(tod, abs=6e-3)


@pytest.mark.parametrize(
    ("name", "n_d", "abbe"),
    [
        ("N-BK7", 1.516800, 64.17),
        ("fused silica", 1.458464, 67.82),
        ("N-SF11", 1.784720, 25.68),  # catalogue of optical glass, from memory
        ("CaF2", 1.43385, 95.0),  # Malitson 1963, Appl. Opt. 2, 1103
    ],
)
def test_catalogue_values(name, n_d, abbe):
    """Index at 587.5618 nm and Abbe number between 486.1327 and 656.2725 nm."""
    d, blue, red = (float(glass.index(name, w)) for w in (587.5618e-9, 486.1327e-9, 656.2725e-9))
    assert d == pytest.approx(n_d, abs=1e-6 if name != "CaF2" else 1e-5)
    assert (d - 1.0) / (blue - red) == pytest.approx(abbe, abs=0.006)


@pytest.mark.parametrize(
    ("name", "wavelength_um", "n"),
    [
        # As the refractive-index data base of M. N. Polyanskiy tabulates the same coefficients.
        ("N-SF11", 0.45, 1.8191639208384323),
        ("N-SF11", 1.55, 1.74339920266441),
        ("CaF2", 0.45, 1.438706292187824),
        ("CaF2", 1.55, 1.4260243272155173),
    ],
)
def test_flint_and_fluoride(name, wavelength_um, n):
    assert float(glass.index(name, wavelength_um * 1e-6)) == pytest.approx(n, abs=1e-12)


def test_fused_silica_has_no_dispersion_at_its_zero():
    """Zero of the group velocity dispersion at 1.2728 um (Malitson's formula)."""
    assert abs(float(glass.gvd_s2_per_m("fused silica", 1.2728e-6))) * 1e27 < 0.02


def test_an_unknown_material_names_the_nearest():
    for error in (ValueError, KeyError):
        with pytest.raises(error, match="nearest known is 'fused silica'"):
            glass.index("fused silicon", 600e-9)


def test_names_are_taken_as_people_write_them():
    assert glass.material("n bk7").name == "N-BK7"
    assert glass.material("Fused-Silica").name == "fused silica"


def test_glass_beyond_its_wavelengths():
    with pytest.raises(ValueError, match="known from 300 to 2500 nm"):
        glass.group_index("N-BK7", [600e-9, 3e-6])
