"""How long the bench takes to move and to scan."""

from __future__ import annotations

import math
from dataclasses import dataclass

from bench.planning.model import BenchFacts, Leg, SourceFacts

__all__ = [
    "ScanEnds",
    "change_time",
    "leg_time",
    "longest_scan",
    "move_time",
    "ramp_m",
    "readings_of",
    "return_time",
    "scan_ends",
    "scan_ends_at",
    "scan_time",
    "step_time",
    "stroke_time",
]


def stroke_time(distance_m: float, speed_m_s: float, acceleration_m_s2: float) -> float:
    """Time of one move that speeds up, cruises and slows down, without settling."""
    distance = abs(distance_m)
    if distance * acceleration_m_s2 >= speed_m_s**2:
        return distance / speed_m_s + speed_m_s / acceleration_m_s2
    return 2.0 * math.sqrt(distance / acceleration_m_s2)


def move_time(facts: BenchFacts, distance_m: float) -> float:
    """Time to go somewhere at full speed, in commands no longer than the longest move."""
    distance = abs(distance_m)
    if distance == 0.0:
        return 0.0
    whole = math.floor(distance / facts.longest_move_m)
    rest = distance - whole * facts.longest_move_m
    time = whole * (
        stroke_time(facts.longest_move_m, facts.speed_m_s, facts.acceleration_m_s2) + facts.settle_s
    )
    if rest > 1e-9 * facts.longest_move_m:
        time += stroke_time(rest, facts.speed_m_s, facts.acceleration_m_s2) + facts.settle_s
    return time


def ramp_m(facts: BenchFacts, speed_m_s: float) -> float:
    """Room to reach a sweep's speed, with a margin and a tenth of a second for read-backs."""
    return 1.2 * speed_m_s**2 / (2.0 * facts.acceleration_m_s2) + 0.1 * speed_m_s


def longest_scan(facts: BenchFacts, speed_m_s: float) -> float:
    """Longest scan, from start to stop, that one command allows with its run-up and run-out.

    At least half the longest move: where the allowances would take more, they are cut instead.
    """
    ramp = ramp_m(facts, speed_m_s)
    room = facts.longest_move_m - facts.reversal_allowance_m - 2.0 * ramp
    return max(room, facts.longest_move_m / 2.0)


@dataclass(frozen=True)
class ScanEnds:
    """Where the stage goes for a scan, in stage readings (metres).

    From wherever it stands to ``overshoot_m``; at full speed to ``begin_m``, which takes up the
    reversal; then through the leg to ``end_m``, at the leg's speed or step by step.
    """

    overshoot_m: float
    begin_m: float
    end_m: float


def scan_ends(facts: BenchFacts, leg: Leg) -> ScanEnds:
    """Run-up and run-out of a leg, cut (never the leg itself) where the travel ends.

    They are cut too where overshoot to end would be longer than the longest move. A step scan
    needs no room to reach a speed.
    """
    return scan_ends_at(facts, leg.start_m, leg.stop_m, leg.speed_m_s)


def scan_ends_at(
    facts: BenchFacts, start_m: float, stop_m: float, speed_m_s: float | None
) -> ScanEnds:
    ramp = 0.0 if speed_m_s is None else ramp_m(facts, speed_m_s)
    room = max(facts.longest_move_m - abs(stop_m - start_m), 0.0)
    run_up = min(ramp, room / 2.0)
    run_out = min(ramp, room / 2.0)
    allowance = min(facts.reversal_allowance_m, room - run_up - run_out)
    low, high = facts.travel_m

    def inside(position_m: float) -> float:
        return min(max(position_m, low), high)

    begin = start_m - facts.approach * run_up
    return ScanEnds(
        overshoot_m=inside(begin - facts.approach * allowance),
        begin_m=inside(begin),
        end_m=inside(stop_m + facts.approach * run_out),
    )


def step_time(facts: BenchFacts, increment_m: float) -> float:
    """Time of one step: move, settle, read.

    The detector's lag comes on top of the settling, because what it shows until then is the stage
    settling. A negative lag shortens nothing.
    """
    move = stroke_time(increment_m, facts.speed_m_s, facts.acceleration_m_s2)
    wait = facts.settle_s + max(facts.lag_s, 0.0)
    return move + wait + max(1.0 / facts.rate_hz, facts.integration_s)


def scan_time(
    facts: BenchFacts,
    start_m: float,
    stop_m: float,
    speed_m_s: float | None,
    increment_m: float | None,
) -> float:
    """Time of a scan from the beginning of its run-up until the stage has settled."""
    ends = scan_ends_at(facts, start_m, stop_m, speed_m_s)
    taken_up = move_time(facts, ends.begin_m - ends.overshoot_m)
    if speed_m_s is not None:
        sweep = stroke_time(ends.end_m - ends.begin_m, speed_m_s, facts.acceleration_m_s2)
        return taken_up + sweep + facts.settle_s
    if increment_m is None:
        raise ValueError("a scan needs a speed or an increment")
    return taken_up + readings_of(facts, start_m, stop_m, None, increment_m) * step_time(
        facts, increment_m
    )


def readings_of(
    facts: BenchFacts,
    start_m: float,
    stop_m: float,
    speed_m_s: float | None,
    increment_m: float | None,
) -> int:
    """Readings of a scan between start and stop."""
    span = abs(stop_m - start_m)
    if speed_m_s is not None:
        return max(1, math.ceil(span / speed_m_s * facts.rate_hz * (1.0 - 1e-12)))
    if increment_m is None:
        raise ValueError("a scan needs a speed or an increment")
    return math.ceil(span / increment_m * (1.0 - 1e-12)) + 1


def leg_time(facts: BenchFacts, leg: Leg, position_m: float) -> float:
    """Time of a leg for a stage that stands at ``position_m``, without any change of source."""
    travel = move_time(facts, scan_ends(facts, leg).overshoot_m - position_m)
    return travel + scan_time(facts, leg.start_m, leg.stop_m, leg.speed_m_s, leg.increment_m)


def return_time(facts: BenchFacts, distance_m: float) -> float:
    """Time to leave the stage on a zero ``distance_m`` away, approached from the right side."""
    allowance = facts.reversal_allowance_m
    return move_time(facts, abs(distance_m) + allowance) + move_time(facts, allowance)


def change_time(source: SourceFacts, current: str | None) -> float:
    """Time until ``source`` is in use and warm; nothing where it is in use already."""
    return 0.0 if source.name == current else source.change_time_s + source.warm_up_s
