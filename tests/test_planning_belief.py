"""A belief follows Bayes' rule, whatever is done to it."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from bench.planning.belief import PRIOR_OUTSIDE, Belief


def _total(belief: Belief) -> float:
    return float(np.sum(belief.mass)) + belief.outside


def test_uniform_says_what_it_was_told():
    belief = Belief.uniform(12.5e-3, 5e-3)
    assert belief.mean_m == pytest.approx(12.5e-3)
    assert belief.half_width_m == pytest.approx(0.95 * 5e-3)
    assert belief.outside == pytest.approx(PRIOR_OUTSIDE)
    assert belief.interval(0.5) == pytest.approx((10e-3, 15e-3))
    assert belief.probability(7.5e-3, 12.5e-3) == pytest.approx((1.0 - PRIOR_OUTSIDE) / 2.0)


def test_normal_has_the_intervals_of_tables():
    """Standard normal quantiles: 95 % within 1.95996, 99 % within 2.57583."""
    belief = Belief.normal(3e-3, 0.2e-3)
    for level, quantile in ((0.95, 1.95996), (0.99, 2.57583), (0.6826895, 1.0)):
        low, high = belief.interval(level)
        assert (high - low) / 2.0 == pytest.approx(quantile * 0.2e-3, rel=3e-3)
    assert belief.sd_m == pytest.approx(0.2e-3, rel=3e-3)


def test_bayes_after_a_miss():
    """Worked by hand: half of 0.995 looked at with probability 0.9 leaves 0.04975 of 0.55225."""
    belief = Belief.uniform(0.0, 1e-3).missed(-2e-3, 0.0, 0.9)
    assert belief.probability(-1e-3, 0.0) == pytest.approx(0.04975 / 0.55225, rel=1e-9)
    assert belief.outside == pytest.approx(0.005 / 0.55225, rel=1e-9)


def test_two_normal_measurements_combine():
    """Precisions add: 30 and 40 um give 24 um, the mean nearer to the better one."""
    belief = Belief.normal(0.0, 30e-6).found(50e-6, 40e-6)
    assert belief.sd_m == pytest.approx(24e-6, rel=0.01)
    assert belief.mean_m == pytest.approx(18e-6, abs=0.5e-6)


def test_found_narrows_to_the_measurement():
    belief = Belief.uniform(12.5e-3, 5e-3).found(13.2184e-3, 2e-6)
    assert belief.mean_m == pytest.approx(13.2184e-3, abs=0.05e-6)
    assert belief.sd_m == pytest.approx(2e-6, rel=0.01)
    assert belief.half_width_m == pytest.approx(1.96 * 2e-6, rel=0.02)


def test_a_packet_beyond_the_grid_is_believed():
    belief = Belief.uniform(0.0, 1e-3).found(1.5e-3, 5e-6)
    assert belief.mean_m == pytest.approx(1.5e-3, abs=1e-6)
    assert belief.sd_m == pytest.approx(5e-6, rel=0.05)


def test_a_wrong_detection_does_not_cost_the_rest():
    """Found, and then nothing there twice: what was believed before comes back."""
    belief = Belief.uniform(0.0, 1e-3).found(0.4e-3, 1e-6)
    for _ in range(3):
        belief = belief.missed(0.38e-3, 0.42e-3, 0.999)
    assert belief.half_width_m > 0.9e-3
    assert belief.outside == pytest.approx(0.005, rel=0.1)


def test_belief_outside_travel_of_rounding_is_refused():
    with pytest.raises(ValueError, match="below rounding"):
        Belief.normal(1.0, 1e-16)


@pytest.mark.parametrize(
    ("centre", "width", "outside"),
    [(0.0, 0.0, 0.1), (0.0, -1.0, 0.1), (math.nan, 1.0, 0.1), (0.0, 1.0, 0.0), (0.0, 1.0, 1.0)],
)
def test_beliefs_that_cannot_be(centre, width, outside):
    for make in (Belief.uniform, Belief.normal):
        with pytest.raises(ValueError, match=r"belief|probability"):
            make(centre, width, outside=outside)


def test_probabilities_that_are_none():
    belief = Belief.uniform(0.0, 1.0)
    with pytest.raises(ValueError, match="from 0 to 1"):
        belief.missed(0.0, 1.0, 1.5)
    with pytest.raises(ValueError, match="between 0 and 1"):
        belief.interval(1.0)
    with pytest.raises(ValueError, match="positive width"):
        belief.found(0.0, 0.0)


def test_it_cannot_be_written_to():
    belief = Belief.uniform(0.0, 1.0)
    with pytest.raises(ValueError, match="read-only"):
        belief.log_mass[0] = 0.0


_steps = st.lists(
    st.one_of(
        st.tuples(
            st.just("missed"),
            st.floats(-3e-3, 3e-3),
            st.floats(-3e-3, 3e-3),
            st.floats(0.0, 1.0),
        ),
        st.tuples(st.just("found"), st.floats(-2e-3, 2e-3), st.floats(1e-8, 1e-3), st.just(0.0)),
    ),
    max_size=8,
)


@settings(deadline=None, max_examples=60)
@given(steps=_steps, normal=st.booleans())
def test_a_belief_always_sums_to_one(steps, normal):
    belief = (Belief.normal if normal else Belief.uniform)(0.0, 1e-3)
    for kind, first, second, probability in steps:
        if kind == "missed":
            after = belief.missed(first, second, probability)
            assert after.outside >= belief.outside * (1.0 - 1e-9)
        else:
            after = belief.found(first, second)
        assert _total(after) == pytest.approx(1.0, abs=1e-9)
        assert np.all(np.diff(after.edges_m) > 0.0)
        assert after.log_mass.size < 3000
        low, high = after.interval(0.95)
        assert low <= after.mean_m <= high
        belief = after


@settings(deadline=None, max_examples=60)
@given(start=st.floats(-1.5e-3, 1.5e-3), length=st.floats(1e-6, 1e-3), seen=st.floats(0.01, 1.0))
def test_a_miss_moves_belief_elsewhere(start, length, seen):
    belief = Belief.normal(0.0, 0.5e-3)
    before = belief.probability(start, start + length)
    after = belief.missed(start, start + length, seen)
    left = 1.0 - min(seen, 1.0 - 1e-9)
    assert after.probability(start, start + length) == pytest.approx(
        before * left / (1.0 - before * (1.0 - left)), abs=1e-9
    )
    assert after.outside > belief.outside


def test_a_thousand_sure_misses_do_not_underflow():
    belief = Belief.uniform(0.0, 1e-3)
    for _ in range(200):
        belief = belief.missed(-1e-3, 1e-3, 1.0)
    assert belief.outside == pytest.approx(1.0)
    assert np.all(np.isfinite(belief.log_mass))
    assert belief.mean_m == pytest.approx(0.0, abs=1e-9)


def test_many_detections_in_one_place_end():
    """The grid stays small though every detection adds its own fine cells to the same place."""
    belief = Belief.uniform(0.0, 1e-3)
    for number in range(40):
        belief = belief.found(1e-9 * number, 1e-6 * (1.0 + 0.01 * number))
        assert belief.log_mass.size < 2000
    assert belief.sd_m < 0.3e-6
