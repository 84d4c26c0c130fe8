"""From two zeros and a rest position to a verdict."""

from __future__ import annotations

import dataclasses
import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from bench.procedure.acceptance import ZeroFound, combine, judge
from bench.spec.model import AcceptSpec

ACCEPT = AcceptSpec(residual_opd_m=200e-9, scans_agree_m=100e-9, coverage_factor=2.0)


def zero(scan: str, nm: float, u_nm: float = 5.0, time_s: float = 0.0) -> ZeroFound:
    return ZeroFound(scan, 12e-3 + nm * 1e-9, u_nm * 1e-9, time_s)


def verdict(a: ZeroFound, b: ZeroFound, left_nm: float, left_s: float = 20.0):
    return judge(
        ACCEPT,
        opd_per_m=2.0,
        resolution_m=20e-9,
        first=a,
        second=b,
        left_at_m=12e-3 + left_nm * 1e-9,
        left_at_s=left_s,
    )


def test_combining_equal_zeros_halves_the_variance():
    both = combine(zero("a", 0.0), zero("b", 0.0, time_s=10.0))
    assert both.zero_m == pytest.approx(12e-3, abs=1e-15)
    assert both.u_m == pytest.approx(5e-9 / math.sqrt(2.0))
    assert both.time_s == pytest.approx(5.0)


def test_zeros_that_disagree_widen_the_uncertainty():
    # Two values 10 standard uncertainties of their difference apart: Birge's ratio is 10.
    apart = 10.0 * math.hypot(5.0, 5.0)
    both = combine(zero("a", 0.0), zero("b", apart))
    assert both.u_m == pytest.approx(10.0 * 5e-9 / math.sqrt(2.0))


def test_what_all_scans_share_is_not_averaged_away():
    a, b = (ZeroFound(name, 12e-3, math.hypot(3e-9, 4e-9), 0.0, common_u_m=4e-9) for name in "ab")
    assert combine(a, b).u_m == pytest.approx(math.hypot(3e-9 / math.sqrt(2.0), 4e-9))


def test_the_budget_of_the_residual_opd():
    """Terms worked by hand: zero 5/sqrt2 nm, read-back 20/sqrt12 nm (GUM 4.3.7), twice in OPD."""
    found = verdict(zero("a", 0.0), zero("b", 0.0, time_s=10.0), left_nm=10.0)
    assert found.residual_opd_m == pytest.approx(20e-9, abs=1e-15)
    expected = 2.0 * math.hypot(5.0 / math.sqrt(2.0), 20.0 / math.sqrt(12.0))
    assert found.residual_u_m == pytest.approx(expected * 1e-9)
    assert found.accepted


def test_drift_between_the_scans_is_carried_to_the_end():
    near = verdict(zero("a", 0.0), zero("b", 4.0, time_s=10.0), 2.0, left_s=6.0)
    late = verdict(zero("a", 0.0), zero("b", 4.0, time_s=10.0), 2.0, left_s=105.0)
    # 8 nm of OPD in 10 s, 100 s after the mean of the scans, as a rectangular half-width.
    extra = math.sqrt(late.residual_u_m**2 - near.residual_u_m**2) * 1e9
    assert extra == pytest.approx(0.8 * 100.0 / math.sqrt(3.0), rel=2e-3)


@pytest.mark.parametrize(
    ("second_nm", "left_nm", "says"),
    [(60.0, 30.0, "the two scans differ by 120.0 nm"), (0.0, 95.0, "is not within 200 nm")],
)
def test_rejections_say_what_was_not_met(second_nm, left_nm, says):
    found = verdict(zero("a", 0.0), zero("b", second_nm), left_nm)
    assert not found.accepted
    assert says in found.reason


def test_the_guard_band_counts():
    # 185 nm of residual OPD alone would pass; with 2 x u it does not.
    found = verdict(zero("a", 0.0), zero("b", 0.0), 92.5)
    assert abs(found.residual_opd_m) < ACCEPT.residual_opd_m
    assert not found.accepted


finite_nm = st.floats(-1e4, 1e4)
sizes_nm = st.floats(0.01, 1e3)


@given(a=finite_nm, b=finite_nm, ua=sizes_nm, ub=sizes_nm, left=finite_nm)
def test_nothing_is_accepted_beyond_its_limits(a, b, ua, ub, left):
    found = verdict(zero("a", a, ua), zero("b", b, ub), left)
    if found.accepted:
        assert abs(found.residual_opd_m) + 2.0 * found.residual_u_m <= 200e-9
        assert 2.0 * abs(a - b) <= 100.0 + 1e-6


@pytest.mark.parametrize("u_nm", [0.0, -5.0, -0.0, math.nan, math.inf])
def test_an_uncertainty_that_cannot_be_is_refused(u_nm):
    good, bad = zero("a", 0.0), zero("b", 0.0, u_nm)
    for pair in ((good, bad), (bad, good)):
        with pytest.raises(ValueError, match="'b'"):
            combine(*pair)
        with pytest.raises(ValueError, match="'b'"):
            verdict(*pair, left_nm=0.0)


def test_a_common_part_that_cannot_be_is_refused():
    bad = dataclasses.replace(zero("b", 0.0), common_u_m=-1e-9)
    with pytest.raises(ValueError, match="'b': its common part"):
        combine(zero("a", 0.0), bad)


def judged(**changed):
    """The verdict of a run that would be accepted, with some of its numbers changed."""
    given = {
        "accept": ACCEPT, "opd_per_m": 2.0, "resolution_m": 20e-9, "first": zero("a", 0.0),
        "second": zero("b", 0.0, time_s=10.0), "left_at_m": 12e-3, "left_at_s": 20.0,
    }  # fmt: skip
    given |= changed
    return judge(given.pop("accept"), **given)


def test_a_limit_that_is_not_a_number_rejects():
    assert judged().accepted
    for key in ("residual_opd_m", "scans_agree_m"):
        assert not judged(accept=dataclasses.replace(ACCEPT, **{key: math.nan})).accepted


spoilt = st.sampled_from([math.nan, math.inf, -math.inf])


@given(
    whose=st.sampled_from(["zero_m", "u_m", "time_s", "common_u_m", "opd_per_m", "resolution_m",
                           "left_at_m", "left_at_s", "coverage_factor"]),
    which=st.sampled_from(["first", "second"]),
    value=spoilt,
)  # fmt: skip
def test_what_is_not_a_finite_number_is_never_accepted(whose, which, value):
    scan = zero(which, 0.0, time_s=5.0)
    if whose == "coverage_factor":
        changed = {"accept": dataclasses.replace(ACCEPT, coverage_factor=value)}
    elif hasattr(scan, whose):
        changed = {which: dataclasses.replace(scan, **{whose: value})}
    else:
        changed = {whose: value}
    with pytest.raises(ValueError, match="not a finite number"):
        judged(**changed)


@pytest.mark.parametrize(
    "changed",
    [
        {"opd_per_m": 0.0},
        {"resolution_m": -20e-9},
        {"accept": dataclasses.replace(ACCEPT, coverage_factor=-2.0)},
        {"accept": dataclasses.replace(ACCEPT, coverage_factor=0.0)},
    ],
)
def test_a_bench_that_cannot_be_is_refused(changed):
    with pytest.raises(ValueError, match="nothing can be judged"):
        judged(**changed)


any_number = st.floats(allow_nan=True, allow_infinity=True)


@given(za=any_number, ua=any_number, zb=any_number, ub=any_number, left=any_number)
def test_whatever_the_numbers_only_finite_bounds_are_accepted(za, ua, zb, ub, left):
    try:
        found = judged(
            first=ZeroFound("a", za, ua, 0.0), second=ZeroFound("b", zb, ub, 10.0), left_at_m=left
        )
    except ValueError:
        return
    assert ua > 0.0 < ub
    if found.accepted:
        assert abs(found.residual_opd_m) + 2.0 * found.residual_u_m <= 200e-9
        assert found.residual_u_m > 0.0
