"""Plans: what they look at, that they stay inside, and that their times come true."""

from __future__ import annotations

import itertools
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from bench.optics.coherence import coherence_lengths
from bench.optics.spectra import gaussian
from bench.planning import (
    Belief,
    BenchFacts,
    Plan,
    SourceFacts,
    leg_time,
    plan_search,
    return_time,
    scan_ends,
)


def lamp(name: str, centre_m: float, fwhm_m: float, signal: float, change_s: float) -> SourceFacts:
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


def bench(change_s: float = 20.0, **changes: object) -> BenchFacts:
    facts = BenchFacts(
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
        glass_shift_m=0.5e-6,
        sources=(
            lamp("white", 600e-9, 60e-9, 1.0, change_s),
            lamp("filter 10 nm", 600e-9, 10e-9, 0.6, change_s),
            lamp("filter 2 nm", 600e-9, 2e-9, 0.3, change_s),
        ),
    )
    return replace(facts, **changes)  # type: ignore[arg-type]


BENCH = bench()


def _holds(facts: BenchFacts, plan: Plan) -> None:
    """What every plan keeps, whatever the belief."""
    low, high = facts.travel_m
    for leg in plan.legs:
        ends = scan_ends(facts, leg)
        assert facts.approach * (leg.stop_m - leg.start_m) > 0.0
        for place in (leg.start_m, leg.stop_m, ends.overshoot_m, ends.begin_m, ends.end_m):
            assert low <= place <= high
        assert abs(ends.end_m - ends.overshoot_m) <= facts.longest_move_m * (1.0 + 1e-9)
        assert (leg.speed_m_s is None) != (leg.increment_m is None)
        assert leg.speed_m_s is None or 0.0 < leg.speed_m_s <= facts.speed_m_s * (1.0 + 1e-9)
        assert leg.readings >= 1
        assert 0.0 < leg.expected_time_s < 1e6
        assert 0.0 < leg.detection_probability < 1.0
        assert leg.why.endswith(".")
    if plan.legs:
        assert [leg.purpose for leg in plan.legs[-2:]] == ["final", "verify"]
        assert 0.0 < plan.expected_time_s < 1e6
        assert plan.worst_time_s < 1e6
        assert 0.0 < plan.miss_probability <= 1.0
        assert plan.white_only_time_s is None or (
            plan.expected_time_s <= plan.white_only_time_s * (1.0 + 1e-9)
        )


# --- what it decides --------------------------------------------------------------------------


def test_a_wide_belief_is_searched_all_over():
    plan = plan_search(BENCH, Belief.uniform(12.5e-3, 5e-3), None)
    _holds(BENCH, plan)
    searches = sorted((leg.start_m, leg.stop_m) for leg in plan.legs if leg.purpose == "search")
    assert searches[0][0] < 7.5e-3 + 10e-6
    assert searches[-1][1] > 17.5e-3 - 10e-6
    # Neighbours overlap by two packets, so that none is cut on the seam.
    for (_, stop), (start, _) in itertools.pairwise(searches):
        assert stop - start > 1.9 * 2.64e-6
    assert plan.miss_probability == pytest.approx(0.005 + 0.003, abs=0.001)
    assert plan.lower_bound_time_s < plan.expected_time_s <= plan.worst_time_s


def test_a_narrow_belief_is_scanned_finely_at_once():
    plan = plan_search(BENCH, Belief.normal(13.2e-3, 0.5e-6), "white")
    assert [leg.purpose for leg in plan.legs] == ["final", "verify"]
    final = plan.legs[0]
    assert final.source == "white"
    assert final.start_m < 13.2e-3 - 2.5 * 2.64e-6
    assert final.stop_m > 13.2e-3 + 2.5 * 2.64e-6


def test_glass_never_makes_a_search_go_round_in_circles():
    """After a search the belief is as wide as unknown glass leaves it: then comes the final."""
    for shift_m in (0.0, 1e-6, 5e-6, 30e-6):
        facts = replace(BENCH, glass_shift_m=shift_m)
        belief = Belief.uniform(12.5e-3, 5e-3).found(13.2e-3, float(np.hypot(0.2e-6, shift_m)))
        assert plan_search(facts, belief, "filter 10 nm").legs[0].purpose == "final"


def test_a_long_range_is_searched_with_a_long_packet():
    """200 mm, half a second to change: the filter pays, and white light has the last word."""
    facts = bench(0.5, travel_m=(0.0, 0.3))
    plan = plan_search(facts, Belief.uniform(0.15, 0.1), "white")
    _holds(facts, plan)
    assert plan.legs[0].source != "white"
    assert plan.legs[-1].source == "white"
    assert plan.white_only_time_s is not None
    assert plan.expected_time_s < 0.7 * plan.white_only_time_s


def test_a_dear_change_is_not_made_for_a_short_range():
    plan = plan_search(bench(600.0), Belief.uniform(12.5e-3, 1e-3), "white")
    assert {leg.source for leg in plan.legs} == {"white"}


def test_the_likeliest_place_comes_first():
    plan = plan_search(BENCH, Belief.normal(12.5e-3, 1e-3), "white", position_m=5e-3)
    first = plan.legs[0]
    assert first.start_m < 13e-3
    assert first.stop_m > 12e-3


def test_a_part_that_was_scanned_in_vain_is_left_for_later():
    belief = Belief.uniform(12.5e-3, 5e-3).missed(7e-3, 12.5e-3, 0.999)
    first = plan_search(BENCH, belief, "white").legs[0]
    assert first.start_m > 12.4e-3


def test_it_searches_again_with_care_and_then_gives_up():
    """All was scanned twice without a packet: first quickly, then with care, then no more."""
    belief, source, position = Belief.uniform(12.5e-3, 2e-3), None, 0.0
    scanned, careful = np.zeros((2, 400)), False
    places = np.linspace(10.5e-3, 14.5e-3, 400)
    for _ in range(60):
        plan = plan_search(BENCH, belief, source, position_m=position)
        _holds(BENCH, plan)
        if not plan.legs:
            break
        leg = plan.legs[0]
        careful = careful or "with care" in leg.why
        scanned[int(careful)] += (places >= leg.start_m) & (places <= leg.stop_m)
        belief = belief.missed(leg.start_m, leg.stop_m, leg.detection_probability)
        source, position = leg.source, scan_ends(BENCH, leg).end_m
    else:
        pytest.fail("it never gave up")
    assert careful
    assert np.all(scanned.sum(axis=0) >= 1.0)
    assert np.mean(scanned[1] >= 1.0) > 0.9
    assert belief.outside > 0.9
    assert plan.miss_probability == 1.0


def test_a_zero_at_the_end_of_the_travel_is_reached():
    for approach in (1, -1):
        facts = replace(BENCH, approach=approach)
        for end in facts.travel_m:
            plan = plan_search(facts, Belief.normal(end, 1e-6), "white")
            _holds(facts, plan)
            low, high = sorted((plan.legs[0].start_m, plan.legs[0].stop_m))
            assert low <= end <= high
            assert high - low > 5e-6


def test_a_zero_beyond_the_travel_is_no_plan():
    assert plan_search(BENCH, Belief.uniform(40e-3, 5e-3), None).legs == ()


def test_sources_that_nobody_sees_are_no_plan():
    dim = tuple(replace(source, signal=1e-4) for source in BENCH.sources)
    assert plan_search(replace(BENCH, sources=dim), Belief.uniform(12.5e-3, 1e-3), None).legs == ()


def test_without_sources_there_is_nothing_to_plan():
    with pytest.raises(ValueError, match="needs a source"):
        plan_search(replace(BENCH, sources=()), Belief.uniform(12.5e-3, 1e-3), None)


# --- whatever the bench -------------------------------------------------------------------------


_benches = st.builds(
    bench,
    change_s=st.floats(0.0, 100.0),
    opd_per_m=st.sampled_from([2.0, -2.0, 4.0, 1.7]),
    speed_m_s=st.floats(1e-4, 10e-3),
    acceleration_m_s2=st.floats(1e-3, 1.0),
    settle_s=st.floats(0.0, 1.0),
    approach=st.sampled_from([1, -1]),
    reversal_allowance_m=st.floats(0.0, 50e-6),
    longest_move_m=st.floats(0.5e-3, 25e-3),
    rate_hz=st.floats(20.0, 1e5),
    integration_s=st.floats(1e-6, 1e-5),
    noise=st.floats(1e-4, 2e-2),
    glass_shift_m=st.floats(0.0, 10e-6),
)
_beliefs = st.builds(
    lambda make, centre, width: make(centre, width),
    st.sampled_from([Belief.uniform, Belief.normal]),
    st.floats(0.0, 25e-3),
    st.floats(1e-7, 5e-3),
)


@settings(deadline=None, max_examples=40)
@given(facts=_benches, belief=_beliefs, source=st.sampled_from([None, "white", "filter 2 nm"]))
def test_every_plan_can_be_carried_out(facts, belief, source):
    plan = plan_search(facts, belief, source)
    _holds(facts, plan)
    if plan.legs and plan.legs[0].purpose == "search":
        leg = plan.legs[0]
        missed = belief.missed(leg.start_m, leg.stop_m, leg.detection_probability)
        assert missed.outside > belief.outside
        _holds(facts, plan_search(facts, missed, leg.source, position_m=leg.stop_m))


# --- its times come true ------------------------------------------------------------------------


def _carried_out(
    facts: BenchFacts, belief: Belief, zero_m: float, rng: np.random.Generator
) -> float:
    """Time of a search for a zero, planned anew after every scan; detection as good as stated."""
    known = {source.name: source for source in facts.sources}
    source, position, time = None, facts.travel_m[0], 0.0
    finals = 0
    for _ in range(200):
        plan = plan_search(facts, belief, source, position_m=position)
        if not plan.legs:
            return time
        leg = plan.legs[0]
        if leg.source != source:
            time += known[leg.source].change_time_s
        time += leg_time(facts, leg, position)
        source, position = leg.source, scan_ends(facts, leg).end_m
        inside = min(leg.start_m, leg.stop_m) <= zero_m <= max(leg.start_m, leg.stop_m)
        if not inside or rng.random() > leg.detection_probability:
            belief = belief.missed(leg.start_m, leg.stop_m, leg.detection_probability)
            continue
        sd_m = leg.half_width_after_m / 1.96
        belief = belief.found(zero_m + sd_m * rng.normal(), sd_m)
        finals += leg.purpose != "search"
        if finals == 2:
            return time + return_time(facts, position - zero_m)
    raise AssertionError("it never ended")


@pytest.mark.parametrize("kind", ["uniform", "normal", "long packet"])
def test_expected_times_come_true(kind):
    rng = np.random.default_rng(11)
    facts = BENCH
    if kind == "uniform":
        belief = Belief.uniform(12.5e-3, 3e-3)
        zeros = rng.uniform(9.5e-3, 15.5e-3, 40)
    elif kind == "normal":
        belief = Belief.normal(12.5e-3, 0.7e-3)
        zeros = np.clip(rng.normal(12.5e-3, 0.7e-3, 40), 9e-3, 16e-3)
    else:
        facts = bench(0.5)
        belief = Belief.uniform(12.5e-3, 8e-3)
        zeros = rng.uniform(4.5e-3, 20.5e-3, 24)
    times = [_carried_out(facts, belief, float(zero), rng) for zero in zeros]
    expected = plan_search(facts, belief, None, position_m=facts.travel_m[0]).expected_time_s
    spread = float(np.std(times)) / np.sqrt(len(times))
    assert float(np.mean(times)) == pytest.approx(expected, abs=0.03 * expected + 2.5 * spread)
    assert max(times) < 5.0 * expected
