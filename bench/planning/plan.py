"""Which sources to scan with, where, in which order: the least expected time.

The planner holds no state. It is asked again after every scan, with the belief as it then is, and
answers with the best legs from there; the caller carries out the first.
"""

from __future__ import annotations

import itertools
import math

import numpy as np

from bench.planning.belief import Belief
from bench.planning.legs import Task, after_detection
from bench.planning.model import BenchFacts, Leg, Plan, SourceFacts
from bench.planning.routes import (
    Route,
    direct_route,
    is_narrow,
    least_time,
    lower_bound_time,
    searched_route,
)
from bench.planning.sampling import WORST_DETECTION, final_room_m, final_way, search_way
from bench.planning.search import Cells

__all__ = ["CAREFUL_OUTSIDE", "GIVE_UP_REACHABLE", "plan_search"]

# Common practice, no source, both of these:
GIVE_UP_REACHABLE = 0.05  # belief within the travel below which searching on is of no use
CAREFUL_OUTSIDE = 0.3  # belief elsewhere above which the range counts as scanned in vain
_MOST_SOURCES = 6


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
    task = Task(
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
        lower_bound_time_s=lower_bound_time(task),
    )


def _after_search(route: Route) -> list[Leg]:
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
    window = 2.0 * final_room_m(facts, source)
    return final_way(facts, source, window).detection_probability >= WORST_DETECTION


def _routes(task: Task, ranked: list[SourceFacts]) -> list[tuple[tuple[SourceFacts, ...], Route]]:
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
    direct = direct_route(task)
    if direct is not None and is_narrow(task):
        return [((), direct)]
    routes: list[tuple[tuple[SourceFacts, ...], Route]] = []
    if direct is not None:
        routes.append(((), direct))
    chains = []
    for count in range(1, len(usable) + 1):
        for chain in itertools.combinations(usable, count):
            rest = after_detection(task, chain)
            if rest is not None:
                chains.append((least_time(task, chain, rest), chain, rest))
    # The white light alone is always worked out, because the plan is compared with it.
    for least, chain, rest in sorted(chains, key=lambda item: item[0]):
        best = min((route.expected_s for _, route in routes), default=math.inf)
        if least < best or chain == (task.final,):
            routes.append((chain, searched_route(task, chain, rest)))
    return routes
