"""The legs of a plan, kept within the travel, and the time that each takes."""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from bench.planning.belief import Belief
from bench.planning.kinematics import change_time, leg_time, longest_scan, readings_of, scan_ends
from bench.planning.model import BenchFacts, Leg, Purpose, SourceFacts
from bench.planning.sampling import (
    FINAL_ROOM,
    Way,
    final_room_m,
    final_way,
    packet_fwhm_m,
    search_way,
)
from bench.planning.search import Cells, Segment, order_time, orders
from bench.planning.wording import why_final, why_narrow, why_verify

FloatArray = NDArray[np.float64]

__all__ = [
    "FINAL_ROOM",
    "INTERVAL_SDS",
    "WINDOW_SDS",
    "Task",
    "after_detection",
    "final_legs",
    "make_leg",
    "narrow_enough",
    "sd_between",
    "timed_legs",
]

# Common practice, no source, all of these:
NARROW_ROOM = 1.5
WINDOW_SDS = 2.576  # 99 % of a normal belief, which a final scan holds
INTERVAL_SDS = 1.96
_SAME_WAVELENGTH = 1e-3  # relative; nearer sources see the same glass


@dataclass(frozen=True)
class Task:
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


def after_detection(task: Task, chain: tuple[SourceFacts, ...]) -> tuple[Leg, ...] | None:
    """Narrowing legs, final and verify after ``chain[0]`` found the packet; times still missing.

    None where a narrowing window is too long for one scan, or narrows nothing that matters.
    """
    facts = task.facts
    way = search_way(facts, chain[0], careful=task.careful)
    assert way is not None
    source, legs = chain[0], []
    for following in chain[1:]:
        if narrow_enough(
            facts, task.final, 2.0 * WINDOW_SDS * sd_between(facts, source, way, task.final)
        ):
            return None
        before = sd_between(facts, source, way, following)
        way = search_way(facts, following, careful=task.careful)
        assert way is not None
        half = WINDOW_SDS * before + NARROW_ROOM * packet_fwhm_m(facts, following)
        if 2.0 * half > longest_scan(facts, way.speed_m_s or facts.speed_m_s):
            return None
        after = INTERVAL_SDS * sd_between(facts, following, way, task.final)
        why = why_narrow(following, INTERVAL_SDS * before, after)
        centre = task.belief.mean_m
        legs.append(
            make_leg(facts, following, way, "search", centre - half, centre + half, after, why)
        )
        source = following
    before = sd_between(facts, source, way, task.final)
    centre = task.belief.mean_m
    legs += final_legs(task, centre - WINDOW_SDS * before, centre + WINDOW_SDS * before)
    return tuple(legs)


def narrow_enough(facts: BenchFacts, final: SourceFacts, width_m: float) -> bool:
    """Whether a belief of that width (99 %) leaves nothing to do but the final scan.

    Either the final scan is hardly longer than its packet needs, or the belief is as narrow as
    unknown glass lets a search make it, and a further search would only find the same again.
    """
    packet = 2.0 * final_room_m(facts, final)
    return width_m < max(2.0 * packet, 3.0 * WINDOW_SDS * facts.glass_shift_m)


def sd_between(facts: BenchFacts, source: SourceFacts, way: Way, following: SourceFacts) -> float:
    """Uncertainty of where the following source's packet is, after this one's was located."""
    apart = abs(source.mean_wavelength_m / following.mean_wavelength_m - 1.0)
    return float(np.hypot(way.sd_m, facts.glass_shift_m if apart > _SAME_WAVELENGTH else 0.0))


def final_legs(task: Task, low_m: float, high_m: float) -> list[Leg]:
    """Final scan and verify for a packet centred between two readings."""
    facts, source = task.facts, task.final
    room = final_room_m(facts, source)
    way = final_way(facts, source, high_m - low_m + 2.0 * room)
    half_width = INTERVAL_SDS * way.sd_m
    final = make_leg(
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


def make_leg(
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


def timed_legs(
    task: Task, legs: tuple[Leg, ...], position_m: float, source: str | None
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
