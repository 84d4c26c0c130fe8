"""Text into quantities and back."""

from __future__ import annotations

import math
import subprocess
import sys

import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from bench.errors import QuantityError
from bench.quantities import (
    DIMENSIONS,
    Quantity,
    dimension_of,
    parse,
    parse_in,
    show,
    show_length,
    units,
)


@pytest.mark.parametrize(
    ("text", "dimension", "si", "u"),
    [
        ("0.55 um", "length", 0.55e-6, None),
        ("0,55 \u00b5m", "length", 0.55e-6, None),  # micro sign, decimal comma
        ("0,55 \u03bcm", "length", 0.55e-6, None),  # Greek mu
        ("12 in", "length", 0.3048, None),  # one inch is 25.4 mm, exactly
        ("20 degC", "temperature", 293.15, None),  # ITS-90: t/degC = T/K - 273.15
        ("20 °C", "temperature", 293.15, None),
        ("68 degF", "temperature", 293.15, None),
        ("18.55 +- 0.74 pm", "length", 18.55e-12, 0.74e-12),
        ("18.55 +/- 0.74 pm", "length", 18.55e-12, 0.74e-12),
        ("18.55 ± 0.74 pm", "length", 18.55e-12, 0.74e-12),
        ("(18.55 ± 0.74) pm", "length", 18.55e-12, 0.74e-12),
        ("18.55(74) pm", "length", 18.55e-12, 0.74e-12),
        ("18,55(74) pm", "length", 18.55e-12, 0.74e-12),
        ("18.55(0.74) pm", "length", 18.55e-12, 0.74e-12),
        ("1.234(5)e-3 V", "voltage", 1.234e-3, 5e-6),
        ("20.0(5) degC", "temperature", 293.15, 0.5),
        ("13.218 401(12) mm", "length", 13.218401e-3, 12e-9),
        ("1 234.5 mm", "length", 1.2345, None),
        ("1\u00a0234,5 mm", "length", 1.2345, None),  # no-break space
        ("12\u2009345 nm", "length", 12.345e-6, None),  # thin space
        ("12\u202f345 nm", "length", 12.345e-6, None),  # narrow no-break space
        ("-0.03 mm", "length", -0.03e-3, None),
        ("\u22120.03 mm", "length", -0.03e-3, None),  # minus sign
        ("+5mm", "length", 5e-3, None),
        (".5 mm", "length", 0.5e-3, None),
        ("1e-3 m", "length", 1e-3, None),
        ("0,500 mm", "length", 0.5e-3, None),  # a leading zero groups nothing
        ("12,5000 mm", "length", 12.5e-3, None),
        ("10 mm/s^2", "acceleration", 0.01, None),
        ("10 mm/s**2", "acceleration", 0.01, None),
        ("10 mm/s²", "acceleration", 0.01, None),
        ("10 mm/s/s", "acceleration", 0.01, None),
        ("20 nm/min", "speed", 20e-9 / 60, None),
        ("1 kHz", "frequency", 1000.0, None),
        ("5 mV", "voltage", 5e-3, None),
        ("2 nA", "current", 2e-9, None),
        ("3 µW", "power", 3e-6, None),
        ("1200 counts", "counts", 1200.0, None),
        ("90 deg", "angle", math.pi / 2, None),
        ("1013.25 hPa", "pressure", 101325.0, None),
        ("45 %", "ratio", 0.45, None),
        ("0.45", "ratio", 0.45, None),
        ("150 fs^2", "dispersion", 150e-30, None),
        ("16000 cm^-1", "wavenumber", 1.6e6, None),
        ("16000 1/cm", "wavenumber", 1.6e6, None),
        ("16000 cm⁻¹", "wavenumber", 1.6e6, None),
        ("8 ppm/K", "expansion", 8e-6, None),
        ("3 inches", "length", 0.0762, None),  # not in our own table
        ("2 minutes", "time", 120.0, None),
    ],
)
def test_reads(text: str, dimension: str, si: float, u: float | None) -> None:
    found = parse(text, dimension)
    assert found.si == pytest.approx(si, rel=1e-14, abs=0)
    if u is None:
        assert found.si_uncertainty is None
    else:
        assert found.si_uncertainty == pytest.approx(u, rel=1e-12, abs=0)


def test_prefixes_do_not_blur_the_last_digit() -> None:
    assert parse("600 nm", "length").si == 600e-9 == 6e-7
    assert parse("20 um", "length").si == 20e-6
    assert parse("12 in", "length").si == 0.3048


@pytest.mark.parametrize(
    ("text", "dimension", "said"),
    [
        ("nan um", "length", "not a finite number"),
        ("NaN mm", "length", "not a finite number"),
        ("inf mm", "length", "not a finite number"),
        ("-inf mm", "length", "not a finite number"),
        ("1e999 mm", "length", "too large"),
        ("1e308 km", "length", "too large"),
        ("1 ± 1e999 mm", "length", "too large"),
        ("9**9**9 um", "length", "not a quantity"),
        ("2*3 um", "length", "not a quantity"),
        ("1+1 um", "length", "not a unit"),
        ("__import__('os') um", "length", "not a quantity"),
        ("5", "length", "has no unit"),
        ("0.55", "speed", "has no unit"),
        ("um", "length", "not a quantity"),
        ("", "length", "not a quantity"),
        ("   ", "length", "not a quantity"),
        ("5 V", "length", "not a length"),
        ("5 mm", "voltage", "not a voltage"),
        ("5 mm", "signal", "not a signal"),
        ("10 mm/s", "acceleration", "not an acceleration"),
        ("20 C", "temperature", "not a temperature"),  # coulomb
        ("-300 degC", "temperature", "absolute zero"),
        ("3 dB", "ratio", "not a unit"),
        ("5 mmm", "length", "'mm'"),
        ("5 UM", "length", "'um'"),
        ("5 mss", "time", "'ms'"),
        ("5 km^9999", "length", "not a unit"),
        ("5 m^^2", "length", "not a unit"),
        ("12,500 mm", "length", "two ways"),
        ("1,234.5 mm", "length", "not a quantity"),
        ("1.234.567 mm", "length", "not a quantity"),
        ("12 34 mm", "length", "not a unit"),
        ("18.55(74) +- 1 pm", "length", "twice"),
        ("18.55 +- nan pm", "length", "not a"),
        ("٣ mm", "length", "not a quantity"),  # digits of other scripts
        ("5 mm\x1b[31m", "length", "not a unit"),
        ("5 " + "m" * 200, "length", "too long"),
        ("5 m m", "length", "not a unit"),
    ],
)
def test_refuses(text: str, dimension: str, said: str) -> None:
    with pytest.raises(QuantityError) as caught:
        parse(text, dimension, where="[stage] speed")
    message = str(caught.value)
    assert said in message
    assert "[stage] speed" in message
    assert "\x1b" not in message


@pytest.mark.parametrize("value", [5, 0.55, None, True, ["1 mm"], {"a": 1}])
def test_refuses_what_is_not_text(value: object) -> None:
    with pytest.raises(QuantityError, match="has no unit") as caught:
        parse(value, "length")  # type: ignore[arg-type]
    assert "0.55 um" in caught.value.mend


def test_an_ambiguous_comma_shows_both_readings() -> None:
    with pytest.raises(QuantityError) as caught:
        parse("12,500 mm", "length")
    assert "12.500" in caught.value.mend
    assert "12500" in caught.value.mend


@pytest.mark.parametrize("text", ["1 V", "1 A", "1 W", "1 counts"])
def test_signal_is_any_of_four(text: str) -> None:
    assert parse(text, "signal").si == 1.0


def test_every_unit_of_the_table_agrees_with_pint() -> None:
    import pint

    registry = pint.UnitRegistry()
    rows = dict(units._PLAIN)
    rows |= {
        prefix + name: units._unit(prefix + name)
        for name in units._PREFIXED
        for prefix in ("", *units._PREFIXES)
    }
    theirs = {"°C": "degC", "°": "deg", "%": "percent", "counts": "count", "ppb": "1e-9"}
    for name, row in rows.items():
        assert row is not None
        # A difference of two temperatures and the place of zero are held apart.
        text = theirs.get(name, name)
        if text in {"degC", "degF"}:
            zero, one = (registry.Quantity(v, text).to("K").magnitude for v in (0.0, 1.0))
            assert row.offset == pytest.approx(zero, rel=1e-12)
            assert row.to_si(1.0) == pytest.approx(one - zero, rel=1e-9)
            continue
        si = registry.Quantity(1.0, text) if text != "1e-9" else registry.Quantity(1e-9)
        assert row.to_si(1.0) == pytest.approx(si.to_base_units().magnitude, rel=1e-12, abs=0), name
        if "counts" not in name and "rad" not in name and name not in {"count", "deg", "°"}:
            want = next((u for p, u, _ in DIMENSIONS.values() if p == row.powers), "")
            assert si.check(registry.Unit(want).dimensionality), name


def test_common_units_do_not_import_pint() -> None:
    code = (
        "import sys; from bench.quantities import parse, parse_in;"
        "parse('0,55 µm','length'); parse('10 mm/s^2','acceleration'); parse_in('20 degC','K');"
        "parse('5 mV','signal'); parse('45 %','ratio'); parse('20 nm/min','speed');"
        "sys.exit('pint' in sys.modules or 'numpy' in sys.modules)"
    )
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0


@given(st.text(max_size=40))
@example("9**9**9 um")
@example("1 %%")
@example("1 _")
@example("1 m^-9*m^-9*m^-9")
@example("1e300 Tm^9")
@example("1e-300 fm^9")
@settings(max_examples=300, deadline=None)
def test_parse_raises_nothing_but_quantity_errors(text: str) -> None:
    for dimension in ("length", "ratio", "signal"):
        try:
            found = parse(text, dimension)
        except QuantityError:
            continue
        assert math.isfinite(found.si)


@given(st.text(alphabet="0123456789.,+-±()eE \u00a0/*^²⁻µumnVs%°CA_in", max_size=16))
@settings(max_examples=300, deadline=None)
def test_parse_of_nearly_right_text(text: str) -> None:
    try:
        found = parse(text, "length")
    except QuantityError:
        return
    assert math.isfinite(found.si)
    assert found.si_uncertainty is None or found.si_uncertainty >= 0


finite = st.floats(-1e12, 1e12, allow_nan=False)
uncertainties = st.floats(1e-18, 1e9, allow_nan=False)


@given(finite, uncertainties, st.sampled_from(["mm", "um", "V", "Hz", "counts", "degF", ""]))
@settings(max_examples=400, deadline=None)
def test_what_is_shown_can_be_read_again(value: float, u: float, unit: str) -> None:
    text = show(value, u, unit)
    kind = "ratio" if not unit else dimension_of(unit)
    if kind == "temperature" and value < -400:
        return
    again = parse(text, kind)
    assert again.unit == unit
    if again.standard_uncertainty is None:  # known to more digits than a float has
        assert again.value == value
        return
    assert again.standard_uncertainty == pytest.approx(u, rel=0.051, abs=0)
    assert abs(again.value - value) <= 0.051 * again.standard_uncertainty + 1e-15 * abs(value)
    assert show(again.value, again.standard_uncertainty, unit) == text


@given(st.floats(allow_nan=True, allow_infinity=True), st.floats(allow_nan=True))
@settings(max_examples=300, deadline=None)
def test_showing_never_fails(value: float, u: float) -> None:
    assert show(value, u, "mm")
    assert show(value, None, "")
    assert show_length(value, u)


@pytest.mark.parametrize(
    ("value", "u", "unit", "text"),
    [
        # JCGM 100:2008 (GUM), 7.2.2, the example of a mass.
        (100.02147, 0.00035, "g", "100.021 47(35) g"),
        (13.2184012, 0.000012, "mm", "13.218 401(12) mm"),
        (18.55, 0.74, "pm", "18.55(74) pm"),
        (0.5, 1.2, "um", "0.5(1.2) um"),
        (12345.0, 123.0, "counts", "12 340(120) counts"),
        (5.0, 0.0996, "V", "5.00(10) V"),
        (-0.00001, 0.2, "mm", "0.00(20) mm"),
        (-3.2, 0.015, "mm", "-3.200(15) mm"),
        (1.23e-13, 4e-15, "s", "1.230(40)e-13 s"),
        (5.0, None, "mm", "5 mm"),
        (5.0, float("nan"), "mm", "5 mm"),
        (5.0, 0.0, "mm", "5 mm"),
        (1234567.25, None, "Hz", "1 234 567 Hz"),
        (1234.5, None, "Hz", "1234.5 Hz"),
        (0.45, None, "", "0.45"),
        (float("nan"), 0.1, "mm", "not known (in mm)"),
        (float("inf"), None, "", "not known"),
    ],
)
def test_shows(value: float, u: float | None, unit: str, text: str) -> None:
    assert show(value, u, unit) == text


@pytest.mark.parametrize(
    ("value_m", "u_m", "text"),
    [
        (13.2184012e-3, 12e-9, "13.218 401(12) mm"),
        (35e-9, 4e-9, "35.0(4.0) nm"),
        (5.2e-6, None, "5.2 um"),
        (0.0, None, "0 mm"),
        (0.0, 3e-9, "0.0(3.0) nm"),
        (1e-9, 3e-6, "0.0(3.0) um"),
        (-12.5e-3, None, "-12.5 mm"),
        (1.5, None, "1.5 m"),
    ],
)
def test_lengths_choose_their_unit(value_m: float, u_m: float | None, text: str) -> None:
    assert show_length(value_m, u_m) == text


def test_conversion_and_json() -> None:
    found = parse("18.55(74) pm", "length").to("nm")
    assert found.value == pytest.approx(0.01855)
    assert found.as_json() == {
        "value": pytest.approx(0.01855),
        "unit": "nm",
        "standard_uncertainty": pytest.approx(0.00074),
    }
    assert Quantity(1.0, "V").as_json() == {"value": 1.0, "unit": "V"}
    assert str(Quantity(18.55, "pm", 0.74)) == "18.55(74) pm"
    assert Quantity(68.0, "degF", 1.8).to("degC").standard_uncertainty == pytest.approx(1.0)
    with pytest.raises(QuantityError):
        found.to("V")
    assert parse_in("20 degC", "degC").value == pytest.approx(20.0)
    with pytest.raises(QuantityError):
        parse_in("20 mm", "V")
