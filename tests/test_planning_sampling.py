"""How fast a packet may be passed, and how long moves take."""

from __future__ import annotations

import itertools
import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from bench.optics.coherence import coherence_lengths
from bench.optics.spectra import gaussian
from bench.planning.kinematics import (
    change_time,
    leg_time,
    move_time,
    readings_of,
    scan_ends,
    scan_time,
    step_time,
    stroke_time,
)
from bench.planning.model import BenchFacts, Leg, SourceFacts
from bench.planning.sampling import (
    detection,
    final_way,
    locating_sd_m,
    packet_fwhm_m,
    search_way,
)


def lamp(name="white", centre_m=600e-9, fwhm_m=60e-9, signal=1.0, change_s=20.0) -> SourceFacts:
    spectrum = gaussian(centre_m, fwhm_m)
    return SourceFacts(
        name=name,
        mean_wavelength_m=spectrum.mean_wavelength_m,
        band=spectrum.half_power_band,
        coherence_fwhm_m=coherence_lengths(spectrum).fwhm_m,
        signal=signal,
        change_time_s=change_s,
        warm_up_s=0.0,
    )


WHITE = lamp()
FACTS = BenchFacts(
    opd_per_m=2.0 * 1.00027,
    travel_m=(0.0, 25e-3),
    speed_m_s=1e-3,
    acceleration_m_s2=10e-3,
    resolution_m=20e-9,
    settle_s=0.05,
    approach=1,
    reversal_allowance_m=20e-6,
    longest_move_m=5e-3,
    rate_hz=1e3,
    integration_s=0.2e-3,
    noise=5e-3,
    accept_residual_opd_m=200e-9,
    glass_shift_m=1e-6,
    sources=(WHITE,),
)


def leg(start_m: float, stop_m: float, speed_m_s: float | None = 1e-4) -> Leg:
    increment = None if speed_m_s is not None else 1e-7
    mode = "sweep" if speed_m_s is not None else "step"
    return Leg("white", mode, "search", start_m, stop_m, speed_m_s, increment, 1, 0.0, 0.0, 0.9, "")


# --- moving ---------------------------------------------------------------------------------------


def test_stroke_time_by_hand():
    """1 mm at 1 mm/s and 10 mm/s^2: 1.1 s. 10 um never reaches the speed: 2 sqrt(d/a) = 63.2 ms."""
    assert stroke_time(1e-3, 1e-3, 10e-3) == pytest.approx(1.1)
    assert stroke_time(10e-6, 1e-3, 10e-3) == pytest.approx(0.0632456, rel=1e-5)


def test_long_ways_are_made_of_allowed_moves():
    """12.5 mm in moves of at most 5 mm: 5.1 + 5.1 + 2.6 s and three settlings."""
    assert move_time(FACTS, -12.5e-3) == pytest.approx(12.8 + 3 * 0.05)
    assert move_time(FACTS, 0.0) == 0.0


@settings(deadline=None)
@given(
    start=st.floats(0.0, 25e-3),
    length=st.floats(1e-6, 5e-3),
    speed=st.one_of(st.none(), st.floats(1e-6, 1e-3)),
    approach=st.sampled_from([1, -1]),
)
def test_ends_of_a_scan_stay_inside_and_in_order(start, length, speed, approach):
    facts = replace(FACTS, approach=approach)
    stop = min(max(start + approach * length, 0.0), 25e-3)
    ends = scan_ends(facts, leg(start, stop, speed))
    places = [ends.overshoot_m, ends.begin_m, start, stop, ends.end_m]
    assert all(0.0 <= place <= 25e-3 for place in places)
    assert all(approach * (b - a) >= -1e-12 for a, b in itertools.pairwise(places))
    assert abs(ends.end_m - ends.overshoot_m) <= facts.longest_move_m + 1e-12


def test_scan_times():
    """A sweep pays for its ramps; a step scan for moving, settling and reading at each place."""
    sweep = scan_time(FACTS, 1e-3, 2e-3, 1e-4, None)
    # Overshoot 20 um in 2 sqrt(d/a) + settle, then 1 mm and two ramps of 10.6 um at 0.1 mm/s.
    ramp = 1.2 * 1e-8 / 0.02 + 1e-5
    by_hand = 2 * math.sqrt(20e-6 / 0.01) + 0.05 + (1e-3 + 2 * ramp) / 1e-4 + 0.01 + 0.05
    assert sweep == pytest.approx(by_hand, rel=1e-6)
    steps = scan_time(FACTS, 1e-3, 1.01e-3, None, 1e-6)
    one = 2 * math.sqrt(1e-6 / 0.01) + 0.05 + 1e-3
    assert steps == pytest.approx(2 * math.sqrt(20e-6 / 0.01) + 0.05 + 11 * one, rel=1e-6)
    assert readings_of(FACTS, 1e-3, 1.01e-3, None, 1e-6) == 11
    assert readings_of(FACTS, 1e-3, 1.01e-3, 1e-4, None) == 100
    with pytest.raises(ValueError, match="speed or an increment"):
        scan_time(FACTS, 0.0, 1e-3, None, None)


@pytest.mark.parametrize(
    ("settle_s", "lag_s", "wait_s"),
    [(0.05, 0.0, 0.05), (0.05, 0.3, 0.35), (0.0, 0.3, 0.3), (0.05, -0.3, 0.05)],
)
def test_a_step_waits_for_the_detector_as_well(settle_s, lag_s, wait_s):
    facts = replace(FACTS, settle_s=settle_s, lag_s=lag_s)
    by_hand = 2 * math.sqrt(1e-6 / 0.01) + wait_s + 1e-3
    assert step_time(facts, 1e-6) == pytest.approx(by_hand)


def test_leg_time_counts_the_way_there():
    item = leg(1e-3, 2e-3)
    there = scan_ends(FACTS, item).overshoot_m
    assert leg_time(FACTS, item, there) == pytest.approx(scan_time(FACTS, 1e-3, 2e-3, 1e-4, None))
    assert leg_time(FACTS, item, there + 1e-3) - leg_time(FACTS, item, there) == pytest.approx(1.15)


def test_a_source_in_use_costs_nothing():
    assert change_time(WHITE, "white") == 0.0
    assert change_time(replace(WHITE, warm_up_s=60.0), None) == 80.0


# --- seeing ---------------------------------------------------------------------------------------


def test_search_keeps_enough_readings_in_a_packet():
    way = search_way(FACTS, WHITE, careful=False)
    assert way is not None
    assert way.mode == "sweep"
    assert packet_fwhm_m(FACTS, WHITE) / way.spacing_m >= 10.0
    assert way.detection_probability == pytest.approx(0.999)


def test_an_undersampled_band_does_not_fold():
    """Fringes a reading of the half-power band lie between the same two multiples of one half,
    whatever the detector's rate, even where the stage is three percent quicker or slower."""
    undersampled = 0
    for rate_hz in np.geomspace(300.0, 5000.0, 25):
        facts = replace(FACTS, rate_hz=float(rate_hz), integration_s=1e-5)
        for source in (WHITE, lamp(fwhm_m=10e-9), lamp(centre_m=650e-9, fwhm_m=2e-9)):
            way = search_way(facts, source, careful=False)
            assert way is not None
            low, high = (2.0 * edge * facts.opd_per_m * way.spacing_m for edge in source.band)
            assert math.floor(low * 0.97) == math.floor(high * 1.03)
            if way.undersampled:
                undersampled += 1
                assert low * 0.97 % 1.0 > 0.1
                assert high * 1.03 % 1.0 < 0.9
    assert undersampled > 25


def test_a_long_packet_is_passed_faster():
    white = search_way(FACTS, WHITE, careful=False)
    narrow = search_way(FACTS, lamp(fwhm_m=10e-9, signal=0.6), careful=False)
    assert white is not None
    assert narrow is not None
    assert narrow.time_per_metre(FACTS) < white.time_per_metre(FACTS) / 3.0


def test_care_forgoes_undersampling():
    way = search_way(FACTS, WHITE, careful=True)
    assert way is not None
    assert way.per_fringe >= 3.0
    assert packet_fwhm_m(FACTS, WHITE) / way.spacing_m >= 20.0


def test_blur_limits_the_speed():
    """Integration over a whole reading: at one fringe a reading nothing is left of the fringes."""
    blurred = replace(FACTS, integration_s=1e-3, settle_s=10.0)
    way = search_way(blurred, lamp(signal=0.1), careful=False)
    assert way is not None
    assert way.mode == "sweep"
    left = abs(np.sinc(blurred.opd_per_m * way.spacing_m / WHITE.mean_wavelength_m))
    assert way.amplitude_left == pytest.approx(float(left), rel=1e-9)
    seen = detection(
        np.array([0.1 * left]), 5e-3, np.array([packet_fwhm_m(FACTS, WHITE) / way.spacing_m])
    )
    assert float(seen[0]) >= 0.999


def test_steps_win_where_readings_are_slow_and_the_stage_is_quick():
    """One reading a second integrated all through: a sweep blurs what a step sees undersampled."""
    slow = replace(FACTS, rate_hz=1.0, integration_s=1.0, settle_s=0.0, acceleration_m_s2=1.0)
    way = search_way(slow, lamp(signal=0.06), careful=False)
    assert way is not None
    assert way.mode == "step"
    assert way.increment_m is not None
    assert search_way(FACTS, WHITE, careful=False).mode == "sweep"


def test_what_cannot_be_seen_is_no_way():
    assert search_way(FACTS, lamp(signal=1e-3), careful=False) is None


def test_detection_against_a_simulated_filter():
    """Q1(d, b) by drawing: a matched filter of unknown phase over white noise (Kay 1998, ch. 7)."""
    rng = np.random.default_rng(3)
    threshold = math.sqrt(2.0 * math.log(1e4 / 1e-4))
    for d in (5.0, 6.0, 7.0, 8.0):
        noise = rng.normal(size=(200_000, 2))
        seen = float(np.mean(np.hypot(noise[:, 0] + d, noise[:, 1]) > threshold))
        # The amplitude that makes d, with 2.3548/sqrt(pi) * 2 readings in the packet's FWHM.
        readings = np.array([2.0 * 2.3548200450309493 / math.sqrt(math.pi)])
        assert float(detection(np.array([d]), 1.0, readings)[0]) == pytest.approx(seen, abs=0.01)


def test_locating_bound_of_the_literature():
    """Fleischer, Windecker & Tiziani 2001, Appl. Opt. 40, 2815: s 1 um, spacing 0.075 um, noise 2 %
    of the amplitude, all in OPD, give 8.23 nm; ours is that times its margin of one and a half."""
    fwhm_m = 2.0 * math.sqrt(2.0 * math.log(2.0)) * 1e-6
    source = replace(WHITE, coherence_fwhm_m=fwhm_m, mean_wavelength_m=600e-9)
    facts = replace(FACTS, opd_per_m=1.0, noise=0.02, resolution_m=0.0)
    sd_m = locating_sd_m(facts, source, 0.075e-6, 1.0, 0.0)
    assert sd_m == pytest.approx(1.5 * 8.23e-9, rel=1e-3)
    # Twice the path in OPD: half the stage reading, for the same readings in OPD.
    doubled = locating_sd_m(replace(facts, opd_per_m=-2.0), source, 0.0375e-6, 1.0, 0.0)
    assert doubled == pytest.approx(sd_m / 2.0, rel=1e-9)


def test_the_final_scan_is_fine_and_sharp():
    way = final_way(FACTS, WHITE, 20e-6)
    assert way.per_fringe >= 8.0
    assert way.amplitude_left >= 0.98
    assert way.sd_m * abs(FACTS.opd_per_m) <= FACTS.accept_residual_opd_m / 6.0
    assert 20e-6 * way.time_per_metre(FACTS) < 120.0


def test_a_slow_detector_gets_a_coarser_final_scan():
    """One reading a second over 20 um: eight a fringe would take nine minutes."""
    slow = replace(FACTS, rate_hz=1.0, integration_s=0.1, settle_s=5.0)
    way = final_way(slow, WHITE, 20e-6)
    assert 2.9 < way.per_fringe < 8.0
