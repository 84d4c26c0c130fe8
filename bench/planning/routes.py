"""Whole routes from a belief to a zero located twice, and what they are compared with."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from bench.planning.kinematics import (
    change_time,
    longest_scan,
    move_time,
    return_time,
    scan_ends,
    stroke_time,
)
from bench.planning.legs import (
    INTERVAL_SDS,
    Task,
    final_legs,
    make_leg,
    narrow_enough,
    sd_between,
    timed_legs,
)
from bench.planning.model import Leg, SourceFacts
from bench.planning.sampling import final_room_m, final_way, search_way
from bench.planning.search import Segment
from bench.planning.wording import why_search

FloatArray = NDArray[np.float64]

__all__ = ["Route", "direct_route", "is_narrow", "least_time", "lower_bound_time", "searched_route"]

WINDOW_LEVEL = 0.99  # of the belief that a final scan holds


@dataclass(frozen=True)
class Route:
    """One candidate: its legs in order and what they cost. ``found`` is P(found in the search)."""

    legs: tuple[Leg, ...]
    expected_s: float
    worst_s: float
    found: float


def direct_route(task: Task) -> Route | None:
    """The final scan at once, where the belief is narrow enough for it."""
    facts = task.facts
    low, high = task.belief.interval(WINDOW_LEVEL)
    room = final_room_m(facts, task.final)
    legs = tuple(final_legs(task, low, high))
    if high - low + 2.0 * room > longest_scan(facts, legs[0].speed_m_s or facts.speed_m_s):
        return None
    legs = timed_legs(task, legs, task.position_m, task.current)
    first, again = (leg.expected_time_s for leg in legs)
    held = task.belief.probability(legs[0].start_m, legs[0].stop_m)
    found = held * legs[0].detection_probability
    back = _return_time(task, legs[-1])
    overlooked = max(task.reachable - found, 0.0)
    return Route(
        legs=legs,
        expected_s=first + found * (again + back) + overlooked * first,
        worst_s=first + again + back,
        found=found,
    )


def _return_time(task: Task, last: Leg) -> float:
    middle = (last.start_m + last.stop_m) / 2.0
    return return_time(task.facts, scan_ends(task.facts, last).end_m - middle)


def searched_route(task: Task, chain: tuple[SourceFacts, ...], rest: tuple[Leg, ...]) -> Route:
    """The best order of segments for the first source of the chain, and what follows."""
    facts, source = task.facts, chain[0]
    way = search_way(facts, source, careful=task.careful)
    assert way is not None
    change = change_time(source, task.current)
    # The way to the next window depends on where the packet was found; the rest does not.
    first_overshoot = scan_ends(facts, rest[0]).overshoot_m
    timed = timed_legs(task, rest, first_overshoot, source.name)
    following = sum(leg.expected_time_s for leg in timed) + _return_time(task, timed[-1])
    lead = facts.approach * (task.belief.mean_m - first_overshoot)

    best: tuple[float, float, float, tuple[Segment, ...], FloatArray] | None = None
    for order, times in task.orders(source, way):
        mass = np.array([segment.mass for segment in order])
        found = mass * way.detection_probability
        reached = 1.0 - np.concatenate(([0.0], np.cumsum(found)[:-1]))
        back = np.array([move_time(facts, item.stop - item.centroid + lead) for item in order])
        total = float(np.sum(found))
        overlooked = max(task.reachable - total, 0.0)
        expected = (
            change
            + float(np.sum(reached * times))
            + float(np.sum(found * back))
            + total * following
            + overlooked * float(np.sum(times))
        )
        if best is None or expected < best[0]:
            worst = change + float(np.sum(times)) + float(np.max(back)) + following
            best = (expected, worst, total, order, times)
    assert best is not None
    expected, worst, total, order, times = best
    changed = task.current is not None and change > 0.0
    half_width = INTERVAL_SDS * sd_between(
        facts, source, way, chain[1] if len(chain) > 1 else task.final
    )
    legs = []
    for number, segment in enumerate(order):
        low, high = sorted(facts.approach * end for end in (segment.start, segment.stop))
        why = why_search(facts, source, way, number=number, careful=task.careful, changed=changed)
        leg = make_leg(facts, source, way, "search", low, high, half_width, why)
        time = float(times[number]) + (change if number == 0 else 0.0)
        legs.append(replace(leg, expected_time_s=time))
    likely = float(np.mean([segment.stop - segment.centroid for segment in order]))
    way_back = move_time(facts, likely + lead)
    first = replace(timed[0], expected_time_s=timed[0].expected_time_s + way_back)
    return Route((*legs, first, *timed[1:]), expected, worst, total)


def is_narrow(task: Task) -> bool:
    """Whether the belief as it is leaves nothing to do but the final scan."""
    low, high = task.belief.interval(WINDOW_LEVEL)
    return narrow_enough(task.facts, task.final, high - low)


def least_time(task: Task, chain: tuple[SourceFacts, ...], rest: tuple[Leg, ...]) -> float:
    """A time that no route of this chain beats: no travel, no ramps, thickest belief first."""
    way = search_way(task.facts, chain[0], careful=task.careful)
    assert way is not None
    scanning = task.least_mean_length * way.time_per_metre(task.facts)
    overshoot = scan_ends(task.facts, rest[0]).overshoot_m
    after = sum(leg.expected_time_s for leg in timed_legs(task, rest, overshoot, chain[0].name))
    seen = task.reachable * way.detection_probability
    return change_time(chain[0], task.current) + 0.99 * scanning + seen * 0.99 * after


def lower_bound_time(task: Task) -> float:
    """No plan can be quicker: to the zero at full speed, and one final scan of its packet alone."""
    facts, source = task.facts, task.final
    middle = (task.cells.edges[1:] + task.cells.edges[:-1]) / 2.0
    distance = float(
        np.sum(np.abs(middle - facts.approach * task.position_m) * task.cells.mass)
        / np.sum(task.cells.mass)
    )
    travel = stroke_time(distance, facts.speed_m_s, facts.acceleration_m_s2)
    width = 2.0 * final_room_m(facts, source)
    way = final_way(facts, source, width)
    return travel + change_time(source, task.current) + width * way.time_per_metre(facts)
