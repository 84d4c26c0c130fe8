"""What a located packet has to be before a run goes by it."""

from __future__ import annotations

import math

import numpy as np
import pytest
from test_run import bench_folder, session

from bench.fringes.model import CoherenceLengths, Estimate, Located, ResidualGlass
from bench.procedure.locating import findings
from bench.procedure.scanning import Readings


@pytest.fixture
def spec(tmp_path):
    return session(bench_folder(tmp_path), 1).spec


X_M = np.linspace(12.0e-3, 12.016e-3, 1601)
READINGS = Readings(np.linspace(0.0, 2.0, X_M.size), X_M, np.ones(X_M.size), np.zeros(X_M.size))


def located(zero_m: float, u_m: float = 4e-9, dispersion_fs2: float = 0.0) -> Located:
    width = Estimate(5.2e-6, 1e-8)  # of OPD: 2.6 um of stage
    return Located(
        found=True,
        zero=Estimate(zero_m, u_m),
        coherence=CoherenceLengths(None, None, None, width),
        residual_glass=ResidualGlass(None, None, Estimate(dispersion_fs2, 0.1)),
    )


@pytest.mark.parametrize(
    ("zero_m", "found"),
    [
        (12.008e-3, True),
        (12.0015e-3, True),
        (12.001e-3, False),
        (12.0155e-3, False),
        (13e-3, False),
    ],
)
def test_a_zero_where_the_scan_saw_half_a_packet_is_not_driven_to(spec, zero_m, found):
    body = findings(spec, spec.sources[0], READINGS, located(zero_m), 6e-6)
    assert body["found"] is found
    assert ("cut by the end" in body["reason"]) is not found
    assert ("zero_m" in body) is found


@pytest.mark.parametrize("u_m", [0.0, -1e-9, math.nan, math.inf])
def test_a_zero_without_an_uncertainty_is_not_driven_to(spec, u_m):
    assert (
        findings(spec, spec.sources[0], READINGS, located(12.008e-3, u_m), 6e-6)["found"] is False
    )


def test_an_axis_of_uncertain_scale_makes_a_dispersed_zero_uncertain(spec):
    """Worked by hand: c x omega x D x 1e-3 of OPD, at 600 nm with 34 fs^2."""
    body = findings(spec, spec.sources[0], READINGS, located(12.008e-3, 4e-9, 34.0), 6e-6)
    omega = 2.0 * math.pi * 299.792458e-9 / 600e-9  # rad/fs, with c in m/fs
    opd_m = 299.792458e-9 * omega * 34.0 * 1e-3
    assert body["zero_common_u_m"] == pytest.approx(opd_m / 2.00054, rel=1e-5)


def test_the_zero_carries_the_time_at_which_it_was_passed(spec):
    assert findings(spec, spec.sources[0], READINGS, located(12.004e-3), 6e-6)[
        "zero_time_s"
    ] == pytest.approx(0.5)


def test_a_scan_without_light_says_so(spec):
    white = spec.sources[0]
    for level, dark in ((0.02, True), (0.05, True), (0.1, False), (1.0, False)):
        signal = np.full(X_M.size, level)
        readings = Readings(READINGS.time_s, X_M, signal, READINGS.saturated)
        body = findings(spec, white, readings, Located(found=False, reason="noise"), 6e-6)
        assert body.get("dark", False) is dark
        assert findings(spec, white, readings, located(12.008e-3), 6e-6)["found"] is True
        assert ("is the lamp on" in body["reason"]) is dark
