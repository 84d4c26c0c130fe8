"""Decisions before the bench moves: what is believed, and which scan to make next."""

from __future__ import annotations

from bench.planning.belief import Belief
from bench.planning.kinematics import ScanEnds, leg_time, return_time, scan_ends
from bench.planning.model import BenchFacts, Leg, Plan, SourceFacts
from bench.planning.plan import plan_search

__all__ = [
    "Belief",
    "BenchFacts",
    "Leg",
    "Plan",
    "ScanEnds",
    "SourceFacts",
    "leg_time",
    "plan_search",
    "return_time",
    "scan_ends",
]
