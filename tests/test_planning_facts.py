"""What the planner is told of a bench."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest

from bench.procedure.facts import bench_facts
from bench.spec import find_bench, load_bench
from drivers import registry


def test_the_planner_knows_the_lag_of_the_detector():
    spec = load_bench(find_bench(None, Path("/nowhere")).path, declared=registry.declared)
    assert bench_facts(spec).lag_s == spec.detector.lag_s
    late = replace(spec, detector=replace(spec.detector, lag_s=0.25))
    assert bench_facts(late).lag_s == pytest.approx(0.25)
