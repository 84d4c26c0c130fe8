"""Locating the zero: near the bound, honest, and told apart from what is no packet.

The scans come from the benchmark's own integration over a spectrum (tests/benchmarks/locating.py).
"""

from __future__ import annotations

import dataclasses
import importlib.util
import math
import sys
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from bench.fringes import Knowledge, Located, Scan, locate
from bench.fringes.spectrum import band_grid
from bench.fringes.verdict import is_step
from bench.fringes.zero import fit_linear


def _load() -> ModuleType:
    path = Path(__file__).parent / "benchmarks" / "locating.py"
    spec = importlib.util.spec_from_file_location("evenarm_locating_benchmark", path)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    return module


B = _load()
BY_NAME = {case.name: case for case in B.CASES}


def case(name: str, **changes: object):
    return dataclasses.replace(BY_NAME[name], **changes)


def drawn(name: str, seed: int = 3, **changes: object) -> tuple[Scan, Knowledge, float]:
    scan, known, zero, _ = case(name, **changes).draw(np.random.default_rng(seed))
    return scan, known, zero


def codes(located: Located) -> set[str]:
    return {notice.code for notice in located.notices}


def off_by(located: Located, zero: float) -> float:
    assert located.zero is not None, located.reason
    return abs(located.zero.value - zero) / located.zero.standard_uncertainty


# --- near the bound, and honest ----------------------------------------------------------------


@pytest.mark.parametrize(
    ("name", "most"),
    [
        ("fine, detector noise", 1.35),
        ("fine, hum", 1.45),
        ("fine, everything and glass", 3.3),
        ("coarse 10 nm", 1.45),
        ("coarse 10 nm, position noise", 4.5),
    ],
)
def test_error_is_near_the_bound_and_the_interval_covers(name: str, most: float) -> None:
    score = B.score(case(name), 40, np.random.default_rng(11))
    assert score.missed == 0
    assert score.wrong == 0
    assert score.ratio_upper < most
    assert score.coverage >= 0.875  # 35 of 40; 95 % intervals fail this once in 600 tries


def test_the_bound_is_beaten_by_no_one_and_the_peers_are_worse() -> None:
    score = B.score(case("fine, position noise"), 25, np.random.default_rng(5), peers=True)
    assert all(rmse > score.rmse_m for rmse in score.peers.values())


@pytest.mark.parametrize("kind", list(B.WITHOUT))
@pytest.mark.parametrize("light", [B.WHITE, B.FILTERED], ids=["fine", "coarse"])
def test_nothing_is_found_where_nothing_is(kind: str, light: object) -> None:
    most = 1 if kind == "noise burst" else 0  # a stretch of noise as long as a packet can pass
    assert B.false_alarms(kind, light, 12, np.random.default_rng(17)) <= most


@pytest.mark.parametrize("kind", list(B.WITHOUT))
def test_nothing_is_found_blindly_where_nothing_is(kind: str) -> None:
    assert B.false_alarms(kind, B.WHITE, 8, np.random.default_rng(19), blind=True) == 0


@pytest.mark.parametrize("known", [True, False])
def test_a_laser_is_called_fringes_everywhere(known: bool) -> None:
    x = np.arange(-15e-6, 15e-6, 20e-9)
    signal = 2.0 + np.cos(2.0 * math.pi * 2.0 * x / 600e-9)
    signal += np.random.default_rng(0).normal(0.0, 0.01, x.size)
    located = locate(Scan(x, signal, 2.0), Knowledge(band=B.WHITE.band if known else None))
    assert not located.found
    assert "fringes everywhere" in located.reason
    assert "monochromatic" in codes(located)


# --- what else is told ----------------------------------------------------------------


def test_without_a_band_the_same_zero_is_found() -> None:
    scan, _, zero = drawn("fine, detector noise")
    located = locate(scan)
    assert off_by(located, zero) < 4.0
    assert located.zero is not None
    assert located.zero.standard_uncertainty < 6e-9


def test_wavelength_and_coherence_are_those_of_the_source() -> None:
    scan, known, _ = drawn("fine, detector noise")
    located = locate(scan, known)
    low, high = B.WHITE.band
    assert located.mean_wavelength_m is not None
    assert located.mean_wavelength_m.value == pytest.approx(2.0 / (low + high), rel=2e-3)
    assert located.coherence is not None
    # Gaussian line of width B: |g| falls to half over 0.882542 / B; the integral of |g|^2 is
    # 0.664283 / B (Mandel's and Goodman's coherence time; Saleh & Teich, Table 11.1-1, from memory)
    width = high - low
    found = located.coherence
    assert found.rule_m is not None
    assert found.fwhm_m is not None
    assert found.integral_m is not None
    assert found.packet_width_m is not None
    assert found.rule_m.value == pytest.approx(1.0 / width, rel=0.02)
    assert found.fwhm_m.value == pytest.approx(0.882542 / width, rel=0.02)
    assert found.integral_m.value == pytest.approx(0.664283 / width, rel=0.02)
    assert found.packet_width_m.value == pytest.approx(0.882542 / width, rel=0.02)


def test_contrast_is_over_the_level_above_dark_and_absent_without_a_dark() -> None:
    scan, known, _ = drawn("fine, detector noise")
    located = locate(scan, known)
    assert located.contrast is not None
    assert located.contrast.value == pytest.approx(0.5, rel=0.02)
    assert locate(dataclasses.replace(scan, dark=None), known).contrast is None


@pytest.mark.parametrize(("phase", "kind"), [(0.0, "bright"), (math.pi, "dark")])
def test_the_fringe_at_the_zero_is_bright_or_dark(phase: float, kind: str) -> None:
    x = np.arange(-12e-6, 12e-6, 20e-9)
    signal = 2.0 + B.WHITE.fringes(2.0 * (x - 1e-6), phase)
    signal += np.random.default_rng(2).normal(0.0, 0.005, x.size)
    fringe = locate(Scan(x, signal, 2.0), Knowledge(band=B.WHITE.band)).fringe_zero
    assert fringe is not None
    assert fringe.kind == kind
    assert fringe.x.value == pytest.approx(1e-6, abs=2e-9)
    assert fringe.probability > 0.99


def test_a_quarter_turn_leaves_the_kind_to_chance() -> None:
    x = np.arange(-12e-6, 12e-6, 20e-9)
    clean = 2.0 + B.WHITE.fringes(2.0 * x, math.pi / 2.0)
    fringes = []
    for seed in range(12):
        signal = clean + np.random.default_rng(seed).normal(0.0, 0.1, x.size)
        fringes.append(locate(Scan(x, signal, 2.0), Knowledge(band=B.WHITE.band)).fringe_zero)
    assert {fringe.kind for fringe in fringes} == {"bright", "dark"}
    # the kind is right in half of the draws: so must the probabilities say, on average
    assert 0.4 < np.mean([fringe.probability for fringe in fringes]) < 0.85


@pytest.mark.parametrize("opd_per_x", [2.0, -2.0])
@pytest.mark.parametrize("thickness_m", [3e-4, -3e-4])
def test_residual_glass_has_the_sign_of_the_arm(opd_per_x: float, thickness_m: float) -> None:
    x = np.arange(-12e-6, 12e-6, 20e-9)
    opd = opd_per_x * x - (B.glass_group_index(600e-9) - 1.0) * thickness_m
    signal = 2.0 + B.WHITE.fringes(opd, 0.3, thickness_m)
    signal += np.random.default_rng(4).normal(0.0, 0.003, x.size)
    known = Knowledge(band=B.WHITE.band, at_wavelength_m=600e-9, glass="N-BK7")
    located = locate(Scan(x, signal, opd_per_x), known)
    assert off_by(located, 0.0) < 4.0
    glass = located.residual_glass
    assert glass is not None
    assert glass.thickness_m is not None
    assert glass.dispersion_fs2 is not None
    spread = glass.thickness_m.standard_uncertainty
    assert spread < 5e-5
    assert glass.thickness_m.value == pytest.approx(thickness_m, abs=4.0 * spread)
    # 77.0 fs^2/mm at 550 nm and 63.5 at 633 nm (refractive index database via ndispers 0.20.0)
    per_mm = glass.dispersion_fs2.value / (glass.thickness_m.value * 1e3)
    assert 63.5 < per_mm < 77.0


def test_the_zero_is_wanted_at_a_stated_wavelength() -> None:
    x = np.arange(-15e-6, 15e-6, 20e-9)
    thickness_m = 5e-4
    opd = 2.0 * x - (B.glass_group_index(600e-9) - 1.0) * thickness_m
    signal = 2.0 + B.WHITE.fringes(opd, 0.3, thickness_m)
    signal += np.random.default_rng(4).normal(0.0, 0.002, x.size)
    known = Knowledge(band=B.WHITE.band, at_wavelength_m=630e-9, glass="N-BK7")
    located = locate(Scan(x, signal, 2.0), known)
    apart = B.glass_group_index(600e-9) - B.glass_group_index(630e-9)
    assert off_by(located, apart * thickness_m / 2.0) < 4.0
    assert located.at_wavelength_m is not None
    assert located.at_wavelength_m.value == 630e-9


def test_without_a_length_the_zero_is_in_the_axis_own_unit() -> None:
    scan, _, zero = drawn("fine, detector noise")
    located = locate(dataclasses.replace(scan, x=scan.x / 1e-9, opd_per_x=None))
    assert off_by(located, zero / 1e-9) < 4.0
    assert "no-length" in codes(located)
    assert located.coherence is None
    assert located.mean_wavelength_m is None


# --- scans as they are ----------------------------------------------------------------


def test_saturated_readings_are_left_out() -> None:
    scan, known, zero = drawn("fine, detector noise")
    clipped = np.minimum(scan.signal, 2.7)
    located = locate(dataclasses.replace(scan, signal=clipped), known)
    assert "saturated" in codes(located)
    assert off_by(located, zero) < 5.0


def test_spikes_are_left_out() -> None:
    scan, known, zero = drawn("fine, detector noise")
    rng = np.random.default_rng(8)
    hit = rng.random(scan.x.size) < 0.02
    signal = scan.signal + hit * rng.choice([-3.0, 3.0], scan.x.size)
    located = locate(dataclasses.replace(scan, signal=signal), known)
    assert "outliers" in codes(located)
    assert off_by(located, zero) < 5.0


@pytest.mark.parametrize("where", [-4e-6, 0.0, 4e-6, 9e-6])
def test_a_cut_packet_says_so_and_stays_honest(where: float) -> None:
    x = np.arange(0.0, 1e-3, 1e-6)
    signal = 2.0 + B.FILTERED.fringes(2.0 * (x - where), 0.4)
    signal += np.random.default_rng(6).normal(0.0, 0.025, x.size)
    located = locate(Scan(x, signal, 2.0), Knowledge(band=B.FILTERED.band))
    assert off_by(located, where) < 3.0
    assert "edge" in codes(located)


def test_a_second_packet_is_mentioned() -> None:
    x = np.arange(-30e-6, 30e-6, 20e-9)
    signal = 2.0 + B.WHITE.fringes(2.0 * x, 0.4) + 0.4 * B.WHITE.fringes(2.0 * (x - 20e-6), 1.0)
    signal += np.random.default_rng(6).normal(0.0, 0.005, x.size)
    located = locate(Scan(x, signal, 2.0), Knowledge(band=B.WHITE.band))
    assert off_by(located, 0.0) < 5.0
    assert "second-packet" in codes(located)


def test_undersampled_fringes_are_known_by_their_band() -> None:
    scan, known, zero = drawn("coarse 10 nm")
    located = locate(scan, known)
    assert off_by(located, zero) < 4.0
    assert "undersampled" in codes(located)


def test_slow_position_errors_are_read_off_the_fringes() -> None:
    x = np.arange(-40e-6, 40e-6, 30e-9)
    wander = 25e-9 * np.sin(2.0 * math.pi * x / 7e-6) + 15e-9 * np.sin(2.0 * math.pi * x / 2.3e-6)
    signal = 2.0 + B.FILTERED.fringes(2.0 * (x + wander - 2e-6), 0.4)
    signal += np.random.default_rng(6).normal(0.0, 0.01, x.size)
    located = locate(Scan(x, signal, 2.0), Knowledge(band=B.FILTERED.band))
    assert "position-noise" in codes(located)
    assert located.zero is not None
    assert abs(located.zero.value - 2e-6) < 0.25e-6
    assert off_by(located, 2e-6) < 5.0


def test_a_refusal_says_what_contrast_would_have_been_seen() -> None:
    x = np.arange(0.0, 1e-3, 1e-6)
    signal = 2.0 + np.random.default_rng(6).normal(0.0, 0.025, x.size)
    located = locate(Scan(x, signal, 2.0, dark=0.0), Knowledge(band=B.FILTERED.band))
    assert located.weakest_contrast is not None
    assert 0.005 < located.weakest_contrast < 0.1
    strong = 2.0 * 1.3 * located.weakest_contrast * B.FILTERED.fringes(2.0 * (x - 4e-4), 0.4)
    assert locate(Scan(x, signal + strong, 2.0), Knowledge(band=B.FILTERED.band)).found


# --- properties ----------------------------------------------------------------


@settings(max_examples=12, deadline=None)
@given(
    shift=st.floats(-1.0, 1.0),
    scale=st.floats(0.1, 1000.0),
    offset=st.floats(-5.0, 5.0),
    backwards=st.booleans(),
)
def test_moving_scaling_and_turning_a_scan_moves_the_zero_alone(
    shift: float, scale: float, offset: float, backwards: bool
) -> None:
    scan, known, _ = drawn("fine, detector noise", seed=9)
    plain = locate(scan, known)
    x, signal = scan.x + shift * 1e-3, scale * scan.signal + offset * scale
    if backwards:
        x, signal = x[::-1], signal[::-1]
    moved = locate(dataclasses.replace(scan, x=x, signal=signal), known)
    assert plain.zero is not None
    assert moved.zero is not None
    near = 0.05 * plain.zero.standard_uncertainty
    assert moved.zero.value - shift * 1e-3 == pytest.approx(plain.zero.value, abs=near)
    assert moved.zero.standard_uncertainty == pytest.approx(
        plain.zero.standard_uncertainty, rel=0.02
    )


@settings(max_examples=40, deadline=None)
@given(
    values=st.lists(st.floats(-1e6, 1e6), min_size=0, max_size=80),
    kind=st.integers(0, 2),
    known=st.booleans(),
)
def test_any_finite_scan_is_answered(values: list[float], kind: int, known: bool) -> None:
    signal = np.array(values)
    x = [np.arange(signal.size), np.zeros(signal.size), np.abs(signal)][kind] * 1e-7
    located = locate(Scan(x, signal, 2.0), Knowledge(band=B.WHITE.band if known else None))
    assert located.found or located.reason


@pytest.mark.parametrize("bad", [np.nan, np.inf])
def test_readings_must_be_finite_and_of_one_shape(bad: float) -> None:
    with pytest.raises(ValueError, match="finite"):
        locate(Scan(np.arange(3.0), np.array([0.0, bad, 1.0])))
    with pytest.raises(ValueError, match="one row each"):
        locate(Scan(np.arange(3.0), np.arange(4.0)))


@pytest.mark.parametrize("readings_in_phase", [4.0, 3.5])
def test_readings_in_step_with_the_fringes_are_refused(readings_in_phase: float) -> None:
    step = readings_in_phase * 550e-9 / 2.0 * 1.0005
    x = np.arange(0.0, 1000.0) * step
    signal = 2.0 + B.FILTERED.fringes(2.0 * (x - 400.3 * step), 0.4)
    signal += np.random.default_rng(6).normal(0.0, 0.025, x.size)
    located = locate(Scan(x, signal, 2.0), Knowledge(band=B.FILTERED.band))
    assert not located.found
    assert "in step" in located.reason
    assert "undersampled" in codes(located)


def test_strong_dispersion_of_an_unnamed_glass_is_followed() -> None:
    x = np.arange(-20e-6, 20e-6, 20e-9)
    opd = 2.0 * x - (B.glass_group_index(600e-9) - 1.0) * 1.5e-3
    signal = 2.0 + B.WHITE.fringes(opd, 0.3, 1.5e-3)
    signal += np.random.default_rng(4).normal(0.0, 0.005, x.size)
    located = locate(Scan(x, signal, 2.0), Knowledge(band=B.WHITE.band, at_wavelength_m=600e-9))
    assert off_by(located, 0.0) < 3.0
    assert located.residual_glass is not None
    assert located.residual_glass.material is None
    assert located.residual_glass.thickness_m is None
    assert located.residual_glass.dispersion_fs2 is not None
    assert located.residual_glass.dispersion_fs2.value == pytest.approx(1.5 * 68.0, rel=0.05)


def test_fringes_far_longer_than_the_source_can_make_are_a_line() -> None:
    x = np.arange(-40e-6, 40e-6, 20e-9)
    fade = np.exp(-4.0 * math.log(2.0) * (x / 14e-6) ** 2)  # a packet of this source has 2.7 um
    signal = 2.0 + fade * np.cos(2.0 * math.pi * 2.0 * x / 600e-9)
    signal += np.random.default_rng(0).normal(0.0, 0.01, x.size)
    located = locate(Scan(x, signal, 2.0), Knowledge(band=B.WHITE.band))
    assert not located.found
    assert "line" in located.reason
    assert "monochromatic" in codes(located)


@pytest.mark.parametrize("jump", [0.2, 1.0, -1.0])
def test_a_step_is_told_from_fringes(jump: float) -> None:
    x = np.arange(-30.0, 30.0)
    frequency = band_grid(0.25, 0.45, 60.0)
    even, noise = np.ones(x.size), np.random.default_rng(1).normal(0.0, 0.01, x.size)
    step = jump * (x > 3.5) + noise
    left = float(np.sum(fit_linear(x, step, 0.0, frequency, even).residual ** 2))
    assert is_step(x, step, left)
    packet = np.exp(-((x / 8.0) ** 2)) * np.cos(2.0 * math.pi * 0.35 * x) + noise
    left = float(np.sum(fit_linear(x, packet, 0.0, frequency, even).residual ** 2))
    assert not is_step(x, packet, left)
