"""Which sources to scan with, where, in which order: the least expected time.

The planner holds no state. It is asked again after every scan, with the belief as it then is, and
answers with the best legs from there; the caller carries out the first.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from bench.planning.belief import Belief
from bench.planning.kinematics import (
    change_time,
    leg_time,
    longest_scan,
    move_time,
    readings_of,
    return_time,
    scan_ends,
    stroke_time,
)
from bench.planning.model import BenchFacts, Leg, Plan, Purpose, SourceFacts
from bench.planning.sampling import (
    WORST_DETECTION,
    Way,
    final_way,
    packet_fwhm_m,
    search_way,
)
from bench.planning.search import Cells, Segment, order_time, orders
from bench.planning.wording import why_final, why_narrow, why_search, why_verify

FloatArray = NDArray[np.float64]

__all__ = ["CAREFUL_OUTSIDE", "GIVE_UP_REACHABLE", "plan_search"]

# Common practice, no source, all of these:
GIVE_UP_REACHABLE = 0.05  # belief within the travel below which searching on is of no use
CAREFUL_OUTSIDE = 0.3  # belief elsewhere above which the range counts as scanned in vain
FINAL_ROOM = 3.0  # packet widths to each side: the whole packet, its lobes and some plain noise
NARROW_ROOM = 1.5
WINDOW_LEVEL = 0.99  # of the belief that a final scan holds
WINDOW_SDS = 2.576  # the same of a normal belief
INTERVAL_SDS = 1.96
_MOST_SOURCES = 6
_SAME_WAVELENGTH = 1e-3  # relative; nearer sources see the same glass


@dataclass(frozen=True)
class _Route:
    """One candidate: its legs in order and what they cost. ``found`` is P(found in the search)."""

    legs: tuple[Leg, ...]
    expected_s: float
    worst_s: float
    found: float


@dataclass(frozen=True)
class _Task:
    """What one call is about. ``position_m`` is where the stage stands."""

    facts: BenchFacts
    belief: Belief
    current: str | None
    position_m: float
    careful: bool
    reachable: float
    cells: Cells  # in approach coordinates
    final: SourceFacts
    least_mean_length: float
    ordered: dict[str, list[tuple[tuple[Segment, ...], FloatArray]]] = field(default_factory=dict)

    def orders(self, source: SourceFacts, way: Way) -> list[tuple[tuple[Segment, ...], FloatArray]]:
        """Orders of segments for a source with the time of each segment; kept for this call."""
        if source.name not in self.ordered:
            position = self.facts.approach * self.position_m
            width = packet_fwhm_m(self.facts, source)
            self.ordered[source.name] = [
                (order, order_time(self.facts, way, order, position))
                for order in orders(self.facts, self.cells, way, width, position)
            ]
        return self.ordered[source.name]


def plan_search(
    facts: BenchFacts,
    belief: Belief,
    current_source: str | None,
    *,
    position_m: float | None = None,
) -> Plan:
    """The legs with the least expected time from this belief to a zero located twice.

    ``current_source`` names the source in use, None where none or not known; ``position_m`` is the
    stage's reading, taken as the end of the travel on the approach side where None (a stage that
    was just homed). The legs end with a ``final`` scan by the source with the shortest packet and
    its ``verify``; where the belief is narrow there are only these two. The legs after a search are
    drawn about the mean of the belief, and belong about what the search will find.

    An empty tuple of legs says that searching on is of no use: nearly all of the belief lies
    outside the travel or outside every expectation. ``expected_time_s`` counts moves, run-ups,
    settling, changes of source, warm-up and the last move onto the zero, weighs each segment with
    the chance that it is reached, and charges a packet overlooked with another pass.
    ``worst_time_s`` is that of all legs. Raises ValueError for facts without sources.
    """
    if not facts.sources:
        raise ValueError("a plan needs a source that can show a packet")
    if position_m is None:
        position_m = facts.travel_m[0] if facts.approach > 0 else facts.travel_m[1]
    cells, reachable = _reachable(facts, belief)
    ranked = sorted(facts.sources, key=lambda source: -source.coherence_fwhm_m)
    pickable = [source for source in ranked if _final_seen(facts, source)]
    if reachable < GIVE_UP_REACHABLE or not pickable:
        return Plan((), 0.0, 0.0, 1.0, None, 0.0)
    final = pickable[-1]
    task = _Task(
        facts=facts,
        belief=belief,
        current=current_source,
        position_m=position_m,
        careful=1.0 - reachable > CAREFUL_OUTSIDE,
        reachable=reachable,
        cells=cells,
        final=final,
        least_mean_length=cells.least_mean_length(),
    )
    routes = _routes(task, ranked)
    if not routes:
        return Plan((), 0.0, 0.0, 1.0, None, 0.0)
    best = min((route for _, route in routes), key=lambda route: route.expected_s)
    white = [route.expected_s for chain, route in routes if set(chain) <= {final}]
    after_search = float(np.prod([leg.detection_probability for leg in _after_search(best)]))
    return Plan(
        legs=best.legs,
        expected_time_s=best.expected_s,
        worst_time_s=best.worst_s,
        miss_probability=1.0 - best.found * after_search,
        white_only_time_s=min(white) if white else None,
        lower_bound_time_s=_lower_bound(task),
    )


def _after_search(route: _Route) -> list[Leg]:
    return [leg for leg in route.legs if leg.purpose != "search"]


def _reachable(facts: BenchFacts, belief: Belief) -> tuple[Cells, float]:
    """The belief within the travel, in approach coordinates, and its probability."""
    low, high = facts.travel_m
    # One edge more at each end of the travel makes every cell lie wholly on one side of it.
    split = belief.missed(low, high, 0.0)
    middle = (split.edges_m[1:] + split.edges_m[:-1]) / 2.0
    mass = np.where((middle > low) & (middle < high), split.mass, 0.0)
    edges = split.edges_m
    if facts.approach < 0:
        edges, mass = -edges[::-1], mass[::-1]
    return Cells(edges, mass), float(np.sum(mass))


def _final_seen(facts: BenchFacts, source: SourceFacts) -> bool:
    window = 2.0 * FINAL_ROOM * packet_fwhm_m(facts, source)
    return final_way(facts, source, window).detection_probability >= WORST_DETECTION


def _routes(task: _Task, ranked: list[SourceFacts]) -> list[tuple[tuple[SourceFacts, ...], _Route]]:
    """The best route of every chain of sources, each with a shorter packet than the one before."""
    usable = [
        source
        for source in ranked[-_MOST_SOURCES:]
        if search_way(task.facts, source, careful=task.careful) is not None
    ]
    others = [source for source in usable if source.name != task.current]
    if task.careful and others:
        # The source in use saw nothing there; another may.
        usable = others
    direct = _direct(task)
    if direct is not None and _narrow(task):
        return [((), direct)]
    routes: list[tuple[tuple[SourceFacts, ...], _Route]] = []
    if direct is not None:
        routes.append(((), direct))
    chains = []
    for count in range(1, len(usable) + 1):
        for chain in itertools.combinations(usable, count):
            rest = _rest(task, chain)
            if rest is not None:
                chains.append((_least(task, chain, rest), chain, rest))
    # The white light alone is always worked out, because the plan is compared with it.
    for least, chain, rest in sorted(chains, key=lambda item: item[0]):
        best = min((route.expected_s for _, route in routes), default=math.inf)
        if least < best or chain == (task.final,):
            routes.append((chain, _searched(task, chain, rest)))
    return routes


def _narrow(task: _Task) -> bool:
    """Whether the belief is so narrow that nothing but the final scan makes sense.

    Either the final scan would be hardly longer than its packet needs, or the belief is as narrow
    as unknown glass lets a search make it, and a further search would only find the same again.
    """
    low, high = task.belief.interval(WINDOW_LEVEL)
    packet = 2.0 * FINAL_ROOM * packet_fwhm_m(task.facts, task.final)
    return high - low < max(2.0 * packet, 3.0 * WINDOW_SDS * task.facts.glass_shift_m)


def _least(task: _Task, chain: tuple[SourceFacts, ...], rest: tuple[Leg, ...]) -> float:
    """A time that no route of this chain beats: no travel, no ramps, thickest belief first."""
    way = search_way(task.facts, chain[0], careful=task.careful)
    assert way is not None
    scanning = task.least_mean_length * way.time_per_metre(task.facts)
    overshoot = scan_ends(task.facts, rest[0]).overshoot_m
    after = sum(leg.expected_time_s for leg in _timed(task, rest, overshoot, chain[0].name))
    seen = task.reachable * way.detection_probability
    return change_time(chain[0], task.current) + 0.99 * scanning + seen * 0.99 * after


# --- the legs that follow a detection ------------------------------------------------------------


def _rest(task: _Task, chain: tuple[SourceFacts, ...]) -> tuple[Leg, ...] | None:
    """Narrowing legs, final and verify after ``chain[0]`` found the packet; times still missing.

    None where a narrowing window is too long for one scan.
    """
    facts = task.facts
    way = search_way(facts, chain[0], careful=task.careful)
    assert way is not None
    source, legs = chain[0], []
    for following in chain[1:]:
        before = _sd_between(facts, source, way, following)
        way = search_way(facts, following, careful=task.careful)
        assert way is not None
        half = WINDOW_SDS * before + NARROW_ROOM * packet_fwhm_m(facts, following)
        if 2.0 * half > longest_scan(facts, way.speed_m_s or facts.speed_m_s):
            return None
        after = INTERVAL_SDS * _sd_between(facts, following, way, task.final)
        why = why_narrow(following, INTERVAL_SDS * before, after)
        centre = task.belief.mean_m
        legs.append(_leg(facts, following, way, "search", centre - half, centre + half, after, why))
        source = following
    before = _sd_between(facts, source, way, task.final)
    centre = task.belief.mean_m
    legs += _finals(task, centre - WINDOW_SDS * before, centre + WINDOW_SDS * before)
    return tuple(legs)


def _sd_between(facts: BenchFacts, source: SourceFacts, way: Way, following: SourceFacts) -> float:
    """Uncertainty of where the following source's packet is, after this one's was located."""
    apart = abs(source.mean_wavelength_m / following.mean_wavelength_m - 1.0)
    return float(np.hypot(way.sd_m, facts.glass_shift_m if apart > _SAME_WAVELENGTH else 0.0))


def _finals(task: _Task, low_m: float, high_m: float) -> list[Leg]:
    """Final scan and verify for a packet centred between two readings."""
    facts, source = task.facts, task.final
    room = FINAL_ROOM * packet_fwhm_m(facts, source)
    way = final_way(facts, source, high_m - low_m + 2.0 * room)
    half_width = INTERVAL_SDS * way.sd_m
    final = _leg(
        facts,
        source,
        way,
        "final",
        low_m - room,
        high_m + room,
        half_width,
        why_final(source, way),
    )
    return [final, replace(final, purpose="verify", why=why_verify())]


def _leg(
    facts: BenchFacts,
    source: SourceFacts,
    way: Way,
    purpose: Purpose,
    low_m: float,
    high_m: float,
    half_width_m: float,
    why: str,
) -> Leg:
    """A leg over that stretch, kept within the travel and the longest scan."""
    longest = longest_scan(facts, way.speed_m_s or facts.speed_m_s)
    if high_m - low_m > longest:
        middle = (low_m + high_m) / 2.0
        low_m, high_m = middle - longest / 2.0, middle + longest / 2.0
    bottom, top = facts.travel_m
    # A window that sticks out is cut; one that lies outside is moved to the end of the travel.
    low, high = min(max(low_m, bottom), top), min(max(high_m, bottom), top)
    if high <= low:
        length = min(high_m - low_m, top - bottom)
        low = bottom if high_m <= bottom else top - length
        high = low + length
    start, stop = (low, high) if facts.approach > 0 else (high, low)
    return Leg(
        source=source.name,
        mode=way.mode,
        purpose=purpose,
        start_m=start,
        stop_m=stop,
        speed_m_s=way.speed_m_s,
        increment_m=way.increment_m,
        readings=readings_of(facts, start, stop, way.speed_m_s, way.increment_m),
        expected_time_s=0.0,
        half_width_after_m=half_width_m,
        detection_probability=way.detection_probability,
        why=why,
    )


def _timed(
    task: _Task, legs: tuple[Leg, ...], position_m: float, source: str | None
) -> tuple[Leg, ...]:
    """The same legs with their times, one after the other from there."""
    known = {entry.name: entry for entry in task.facts.sources}
    warm = {source}
    timed = []
    for leg in legs:
        change = 0.0
        if leg.source != source:
            change = change_time(known[leg.source], source)
            if leg.source in warm:
                change -= known[leg.source].warm_up_s
        time = change + leg_time(task.facts, leg, position_m)
        timed.append(replace(leg, expected_time_s=time))
        source, position_m = leg.source, scan_ends(task.facts, leg).end_m
        warm.add(source)
    return tuple(timed)


# --- whole routes --------------------------------------------------------------------------------


def _direct(task: _Task) -> _Route | None:
    """The final scan at once, where the belief is narrow enough for it."""
    facts = task.facts
    low, high = task.belief.interval(WINDOW_LEVEL)
    room = FINAL_ROOM * packet_fwhm_m(facts, task.final)
    legs = tuple(_finals(task, low, high))
    if high - low + 2.0 * room > longest_scan(facts, legs[0].speed_m_s or facts.speed_m_s):
        return None
    legs = _timed(task, legs, task.position_m, task.current)
    first, again = (leg.expected_time_s for leg in legs)
    held = task.belief.probability(legs[0].start_m, legs[0].stop_m)
    found = held * legs[0].detection_probability
    back = _return_time(task, legs[-1])
    overlooked = max(task.reachable - found, 0.0)
    return _Route(
        legs=legs,
        expected_s=first + found * (again + back) + overlooked * first,
        worst_s=first + again + back,
        found=found,
    )


def _return_time(task: _Task, last: Leg) -> float:
    middle = (last.start_m + last.stop_m) / 2.0
    return return_time(task.facts, scan_ends(task.facts, last).end_m - middle)


def _searched(task: _Task, chain: tuple[SourceFacts, ...], rest: tuple[Leg, ...]) -> _Route:
    """The best order of segments for the first source of the chain, and what follows."""
    facts, source = task.facts, chain[0]
    way = search_way(facts, source, careful=task.careful)
    assert way is not None
    change = change_time(source, task.current)
    # The way to the next window depends on where the packet was found; the rest does not.
    first_overshoot = scan_ends(facts, rest[0]).overshoot_m
    timed = _timed(task, rest, first_overshoot, source.name)
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
    half_width = INTERVAL_SDS * _sd_between(
        facts, source, way, chain[1] if len(chain) > 1 else task.final
    )
    legs = []
    for number, segment in enumerate(order):
        low, high = sorted(facts.approach * end for end in (segment.start, segment.stop))
        why = why_search(facts, source, way, number=number, careful=task.careful, changed=changed)
        leg = _leg(facts, source, way, "search", low, high, half_width, why)
        time = float(times[number]) + (change if number == 0 else 0.0)
        legs.append(replace(leg, expected_time_s=time))
    likely = float(np.mean([segment.stop - segment.centroid for segment in order]))
    way_back = move_time(facts, likely + lead)
    first = replace(timed[0], expected_time_s=timed[0].expected_time_s + way_back)
    return _Route((*legs, first, *timed[1:]), expected, worst, total)


def _lower_bound(task: _Task) -> float:
    """No plan can be quicker: to the zero at full speed, and one final scan of its packet alone."""
    facts, source = task.facts, task.final
    middle = (task.cells.edges[1:] + task.cells.edges[:-1]) / 2.0
    distance = float(
        np.sum(np.abs(middle - facts.approach * task.position_m) * task.cells.mass)
        / np.sum(task.cells.mass)
    )
    travel = stroke_time(distance, facts.speed_m_s, facts.acceleration_m_s2)
    width = 2.0 * FINAL_ROOM * packet_fwhm_m(facts, source)
    way = final_way(facts, source, width)
    return travel + change_time(source, task.current) + width * way.time_per_metre(facts)
