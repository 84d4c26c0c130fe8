"""The order in which the parts of a wide belief are scanned with one source.

Everything here is in approach coordinates: stage reading times the approach direction, so that
every scan rises.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from bench.planning.kinematics import longest_scan, move_time, scan_ends_at, scan_time
from bench.planning.model import BenchFacts
from bench.planning.sampling import Way

FloatArray = NDArray[np.float64]

__all__ = ["Cells", "Segment", "order_time", "orders"]

SEAM_ROOM = 2.0  # packet widths of scan beyond the belief that a segment is for
_DONE = 1e-3  # of the reachable belief may stay unscanned
_THIN = 0.01  # density, over the densest in the window, below which a window's ends are cut
_MOST_SEGMENTS = 40
_PARTS = (1.0, 0.5, 0.25, 0.1)  # of the longest scan
_STARTS = 64


@dataclass(frozen=True)
class Cells:
    """A belief over approach coordinates: ``edges`` (n+1,) rising, ``mass`` (n,)."""

    edges: FloatArray
    mass: FloatArray

    def cumulative(self) -> FloatArray:
        return np.concatenate(([0.0], np.cumsum(self.mass)))

    def cleared(self, start: float, stop: float) -> Cells:
        """The same without what lies between start and stop."""
        first = int(np.searchsorted(self.edges, start, side="right"))
        last = int(np.searchsorted(self.edges, stop, side="left"))
        density = self.mass / np.diff(self.edges)
        left = self.edges[:first] if first else np.array([start])
        right = self.edges[last:] if last < self.edges.size else np.array([stop])
        # Cells that the window cuts keep the part outside it; the window itself is one empty cell.
        edges, mass = [left], [self.mass[: max(first - 1, 0)]]
        if first and left[-1] < start:
            edges.append(np.array([start]))
            mass.append(np.array([density[first - 1] * (start - left[-1])]))
        mass.append(np.array([0.0]))
        if last < self.edges.size and right[0] > stop:
            edges.append(np.array([stop]))
            mass.append(np.array([density[last - 1] * (right[0] - stop)]))
        edges.append(right)
        mass.append(self.mass[last:])
        return Cells(np.concatenate(edges), np.concatenate(mass))

    def flat(self) -> bool:
        """Whether all cells that hold something are equally dense."""
        density = (self.mass / np.diff(self.edges))[self.mass > 0.0]
        return bool(np.max(density) < 1.02 * np.min(density))

    def least_mean_length(self) -> float:
        """Length that any search looks through on average, in units of the mass: thickest first."""
        width = np.diff(self.edges)
        order = np.argsort(-self.mass / width)
        through = np.cumsum(width[order]) - width[order] / 2.0
        return float(np.sum(through * self.mass[order]))

    def within(self, start: float, stop: float) -> tuple[float, float]:
        """Mass between start and stop, and its centroid (the middle where there is none)."""
        low = np.clip(self.edges[:-1], start, stop)
        high = np.clip(self.edges[1:], start, stop)
        part = self.mass * (high - low) / np.diff(self.edges)
        total = float(np.sum(part))
        if total <= 0.0:
            return 0.0, (start + stop) / 2.0
        return total, float(np.sum(part * (low + high)) / (2.0 * total))


@dataclass(frozen=True)
class Segment:
    """One scan from ``start`` to ``stop``; ``mass`` is the belief it looks at first."""

    start: float
    stop: float
    mass: float
    centroid: float


@dataclass(frozen=True)
class _Task:
    """What stays the same while one order is made."""

    facts: BenchFacts
    way: Way
    margin: float
    travel: tuple[float, float]
    longest: float  # of the belief looked at in one scan

    def window(self, start: float, stop: float) -> tuple[float, float]:
        """The scan that looks at the belief from start to stop: with room for the packet."""
        low, high = self.travel
        return max(start - self.margin, low), min(stop + self.margin, high)


def orders(
    facts: BenchFacts, cells: Cells, way: Way, packet_fwhm_m: float, position: float
) -> list[tuple[Segment, ...]]:
    """Several sensible orders of segments that look at all but a thousandth of ``cells``.

    Two families, each with long and short segments: from one end to the other, and always the
    segment with most belief for its time, travel included, which goes outward from where the
    belief is thickest. Each segment reaches two packet widths beyond the belief that it is for, so
    that a packet on the seam of two is seen, to one width on either side at least, by one of
    them. ``cells`` lie within the travel.
    """
    low, high = sorted(facts.approach * end for end in facts.travel_m)
    longest = longest_scan(facts, way.speed_m_s or facts.speed_m_s)
    margin = min(SEAM_ROOM * packet_fwhm_m, longest / 4.0)
    thick = _trimmed(cells)
    flat, support = thick.flat(), _support(thick)
    found: list[tuple[Segment, ...]] = []
    for part in _PARTS:
        length = part * (longest - 2.0 * margin)
        if part < 1.0 and (support > _MOST_SEGMENTS * length or length < 2.0 * margin):
            continue
        task = _Task(facts, way, margin, (low, high), length)
        candidates = [_in_turn(task, thick)]
        if not flat:
            candidates.append(_thickest_first(task, thick, position))
        found += [order for order in candidates if order and order not in found]
    return found


def _support(cells: Cells) -> float:
    return float(np.sum(np.diff(cells.edges)[cells.mass > 0.0]))


def _trimmed(cells: Cells) -> Cells:
    """The cells without thin remains: the thinnest that together hold less than what may stay."""
    density = cells.mass / np.diff(cells.edges)
    order = np.argsort(density)
    thin = order[np.cumsum(cells.mass[order]) <= _DONE * np.sum(cells.mass)]
    mass = cells.mass.copy()
    mass[thin] = 0.0
    return Cells(cells.edges, mass)


def _regions(cells: Cells) -> list[tuple[float, float]]:
    """Stretches of cells that hold something, in rising order."""
    full = np.concatenate(([0], (cells.mass > 0.0).astype(np.int8), [0]))
    change = np.diff(full)
    begin, end = np.flatnonzero(change == 1), np.flatnonzero(change == -1)
    return [(float(cells.edges[a]), float(cells.edges[b])) for a, b in zip(begin, end, strict=True)]


def _in_turn(task: _Task, cells: Cells) -> tuple[Segment, ...]:
    left = cells
    segments: list[Segment] = []
    while regions := _regions(left):
        begin, end = regions[0]
        # Stretches that one scan can hold together are scanned together.
        joined = [stop for _, stop in regions if stop - begin <= task.longest]
        if joined:
            end = joined[-1]
        count = int(np.ceil((end - begin) / task.longest * (1.0 - 1e-9)))
        start, stop = task.window(begin, begin + (end - begin) / max(count, 1))
        mass, centroid = left.within(start, stop)
        segments.append(Segment(start, stop, mass, centroid))
        left = left.cleared(start, stop)
        if len(segments) > 8 * _MOST_SEGMENTS:
            break
    return tuple(segments)


def _thickest_first(task: _Task, cells: Cells, position: float) -> tuple[Segment, ...]:
    left = cells
    enough = _DONE * float(np.sum(left.mass))
    segments: list[Segment] = []
    while float(np.sum(left.mass)) > enough and len(segments) < 8 * _MOST_SEGMENTS:
        begin, end = _best_window(task, left, position)
        start, stop = task.window(begin, end)
        mass, centroid = left.within(start, stop)
        segments.append(Segment(start, stop, mass, centroid))
        left = left.cleared(start, stop)
        position = stop
    return tuple(segments)


def _best_window(task: _Task, cells: Cells, position: float) -> tuple[float, float]:
    """The stretch with most belief for its time."""
    held = np.flatnonzero(cells.mass > 0.0)
    regions = _regions(cells)
    thinned = held[:: max(1, held.size // _STARTS)]
    lengths = task.longest * np.array([1.0, 0.5])
    edges = [cells.edges[thinned], np.array([begin for begin, _ in regions])]
    edges += [np.array([end for _, end in regions]) - length for length in lengths]
    begins = np.concatenate(edges)
    first, last = regions[0][0], regions[-1][1]
    begins = np.clip(begins, first, None)[:, None]
    ends = np.minimum(begins + lengths, last)
    cumulative = cells.cumulative()
    mass = np.interp(ends, cells.edges, cumulative) - np.interp(begins, cells.edges, cumulative)
    distance = np.abs(begins - task.margin - position)
    facts = task.facts
    # About the time to get there and to scan; it ranks the windows and promises nothing.
    time = (
        2.0 * (facts.settle_s + facts.speed_m_s / facts.acceleration_m_s2)
        + distance / facts.speed_m_s
        + (ends - begins + 2.0 * task.margin) * task.way.time_per_metre(facts)
    )
    row, column = np.unravel_index(int(np.argmax(mass / time)), mass.shape)
    return _cut_thin(cells, float(begins[row, 0]), float(ends[row, column]))


def _cut_thin(cells: Cells, begin: float, end: float) -> tuple[float, float]:
    """The window without thin ends."""
    low = np.clip(cells.edges[:-1], begin, end)
    high = np.clip(cells.edges[1:], begin, end)
    density = np.where(high > low, cells.mass / np.diff(cells.edges), 0.0)
    thick = np.flatnonzero(density > _THIN * np.max(density))
    return float(low[thick[0]]), float(high[thick[-1]])


def order_time(
    facts: BenchFacts, way: Way, order: tuple[Segment, ...], position: float
) -> FloatArray:
    """Time of each segment of an order, travel included, shape (n,)."""
    times = np.empty(len(order))
    for index, segment in enumerate(order):
        start, stop = (facts.approach * end for end in (segment.start, segment.stop))
        ends = scan_ends_at(facts, start, stop, way.speed_m_s)
        travel = move_time(facts, ends.overshoot_m - facts.approach * position)
        times[index] = travel + scan_time(facts, start, stop, way.speed_m_s, way.increment_m)
        position = facts.approach * ends.end_m
    return times
