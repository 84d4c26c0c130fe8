"""Where the zero may be: a probability over stage reading that every scan narrows."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

__all__ = ["PRIOR_OUTSIDE", "Belief"]

# Common practice, no source: one alignment in two hundred is not where its notes say it is.
PRIOR_OUTSIDE = 0.005
# Part of a detection's belief that stays with what was believed before, in case it was wrong.
WRONG_DETECTION = 1e-3
_CELLS = 400
_MOST_CELLS = 1200
# The unexpected place is thought to be anywhere in this many times the expected width.
_OUTSIDE_SPREAD = 10.0
_SURE_MISS_LIMIT = 1e-9


@dataclass(frozen=True, eq=False)
class Belief:
    """Probability of the zero's stage reading, constant in each cell of a grid.

    ``edges_m`` has shape (n+1,) and rises; ``log_mass`` has shape (n,) and holds the logarithm of
    each cell's probability; ``log_outside`` that of the zero being in no cell at all. All
    together are one. Beliefs are never changed: every method gives a new one.

    Make one with ``uniform`` or ``normal``.
    """

    edges_m: FloatArray
    log_mass: FloatArray
    log_outside: float

    @classmethod
    def uniform(
        cls, centre_m: float, half_width_m: float, *, outside: float = PRIOR_OUTSIDE
    ) -> Belief:
        """Equally likely within ``centre_m`` +- ``half_width_m`` (> 0).

        ``outside``, within 0 < outside < 1, is the chance that it is elsewhere. Raises ValueError.
        """
        _check(centre_m, half_width_m, outside)
        edges = centre_m + half_width_m * np.linspace(-1.0, 1.0, _CELLS + 1)
        return _normalised(edges, np.full(_CELLS, np.log((1.0 - outside) / _CELLS)), outside)

    @classmethod
    def normal(cls, mean_m: float, sd_m: float, *, outside: float = PRIOR_OUTSIDE) -> Belief:
        """Normal with standard deviation ``sd_m`` (> 0), cut at five of them. Raises ValueError."""
        _check(mean_m, sd_m, outside)
        edges = np.linspace(-5.0, 5.0, _CELLS + 1)
        centre = (edges[1:] + edges[:-1]) / 2.0
        return _normalised(mean_m + sd_m * edges, -(centre**2) / 2.0, outside)

    # --- what it says --------------------------------------------------------------------------

    @cached_property
    def mass(self) -> FloatArray:
        """Probability of each cell, shape (n,)."""
        result: FloatArray = np.exp(self.log_mass)
        return result

    @property
    def outside(self) -> float:
        """Probability that the zero is not where it was expected at all."""
        return float(np.exp(self.log_outside))

    @cached_property
    def _cumulative(self) -> FloatArray:
        """Of the mass inside alone, at the edges, 0 to 1."""
        inside = np.exp(self.log_mass - np.max(self.log_mass))
        summed = np.concatenate(([0.0], np.cumsum(inside)))
        result: FloatArray = summed / summed[-1]
        return result

    def interval(self, level: float = 0.95) -> tuple[float, float]:
        """Central interval, metres, that holds ``level`` (0 to 1) of the belief inside the grid."""
        if not 0.0 < level < 1.0:
            raise ValueError(f"an interval holds a part between 0 and 1, not {level:g}")
        tail = (1.0 - level) / 2.0
        return self._quantile(tail), self._quantile(1.0 - tail)

    def _quantile(self, part: float) -> float:
        # The cumulative is flat where a scan has missed; the first edge that exceeds is wanted.
        upper = int(np.searchsorted(self._cumulative, part, side="right"))
        upper = min(max(upper, 1), self.edges_m.size - 1)
        low, high = float(self._cumulative[upper - 1]), float(self._cumulative[upper])
        share = 0.0 if high <= low else min(max((part - low) / (high - low), 0.0), 1.0)
        return float(
            self.edges_m[upper - 1] + share * (self.edges_m[upper] - self.edges_m[upper - 1])
        )

    @property
    def mean_m(self) -> float:
        """Mean of the central 95 %: a wrong detection's thin remains far away do not pull it."""
        low, high = self.interval(0.95)
        begin = np.clip(self.edges_m[:-1], low, high)
        end = np.clip(self.edges_m[1:], low, high)
        weight = np.exp(self.log_mass - np.max(self.log_mass)) * (end - begin)
        weight = weight / np.diff(self.edges_m)
        return float(np.sum(weight * (begin + end)) / (2.0 * np.sum(weight)))

    @property
    def sd_m(self) -> float:
        """Half of the central 68.27 %, which is the standard deviation of a normal belief."""
        low, high = self.interval(0.6826894921)
        return (high - low) / 2.0

    @property
    def half_width_m(self) -> float:
        """Half of the central 95 % interval."""
        low, high = self.interval(0.95)
        return (high - low) / 2.0

    def probability(self, start_m: float, stop_m: float) -> float:
        """Probability that the zero lies between the two readings, in either order."""
        low, high = sorted((start_m, stop_m))
        overlap = np.minimum(self.edges_m[1:], high) - np.maximum(self.edges_m[:-1], low)
        share = np.clip(overlap / np.diff(self.edges_m), 0.0, 1.0)
        return float(np.sum(self.mass * share))

    # --- what a scan does to it ------------------------------------------------------------------

    def missed(self, start_m: float, stop_m: float, detection_probability: float) -> Belief:
        """After a scan between the two readings that saw no packet.

        Bayes: what lies there is multiplied by the probability of having missed it, and everything
        else, the outside too, grows in proportion. Raises ValueError unless the probability is
        from 0 to 1.
        """
        if not 0.0 <= detection_probability <= 1.0:
            raise ValueError(f"a probability is from 0 to 1, not {detection_probability:g}")
        low, high = sorted((start_m, stop_m))
        edges, log_mass = self._split(np.array([low, high]))
        centre = (edges[1:] + edges[:-1]) / 2.0
        seen = (centre > low) & (centre < high)
        missed = np.log(max(1.0 - detection_probability, _SURE_MISS_LIMIT))
        return _scaled(edges, np.where(seen, log_mass + missed, log_mass), self.log_outside)

    def found(self, mean_m: float, sd_m: float) -> Belief:
        """After a scan that located the packet at ``mean_m`` with uncertainty ``sd_m`` (> 0).

        The uncertainty holds everything that stands between that packet and the zero that is
        wanted; the caller adds the shift between sources that glass allows. Bayes with a normal
        likelihood; the unexpected place counts as spread evenly over ten times the expected width,
        so that a packet found just beyond the grid is believed. A thousandth of the belief stays
        as it was before, in case the packet was not the one. Raises ValueError.
        """
        _check(mean_m, sd_m, 0.5)
        span = float(self.edges_m[-1] - self.edges_m[0])
        fine = mean_m + sd_m * np.linspace(-6.0, 6.0, 241)
        edges, log_before = self._split(fine)
        width = np.diff(edges)
        centre = (edges[1:] + edges[:-1]) / 2.0
        log_wide = self.log_outside + np.log(width / (_OUTSIDE_SPREAD * span))
        log_after = np.logaddexp(log_before, log_wide) - ((centre - mean_m) / sd_m) ** 2 / 2.0
        log_after -= np.logaddexp.reduce(log_after)
        log_mass = np.logaddexp(
            log_after + np.log1p(-WRONG_DETECTION), log_before + np.log(WRONG_DETECTION)
        )
        log_outside = self.log_outside + np.log(WRONG_DETECTION)
        edges, log_mass = _thinned(edges, log_mass, float(fine[0]), float(fine[-1]))
        return _scaled(edges, log_mass, log_outside)

    def _split(self, more_m: FloatArray) -> tuple[FloatArray, FloatArray]:
        """The same belief on a grid with more edges; those beyond the grid add empty cells."""
        edges = np.union1d(self.edges_m, more_m)
        centre = (edges[1:] + edges[:-1]) / 2.0
        parent = np.searchsorted(self.edges_m, centre) - 1
        inside = (parent >= 0) & (parent < self.log_mass.size)
        parent = np.clip(parent, 0, self.log_mass.size - 1)
        share = np.diff(edges) / np.diff(self.edges_m)[parent]
        log_mass = np.where(inside, self.log_mass[parent] + np.log(share), -np.inf)
        return edges, log_mass


def _check(centre_m: float, width_m: float, outside: float) -> None:
    if not (np.isfinite(centre_m) and np.isfinite(width_m) and width_m > 0.0):
        raise ValueError(
            f"a belief needs a finite centre and a positive width, not {centre_m:g} m and"
            f" {width_m:g} m"
        )
    if not 0.0 < outside < 1.0:
        raise ValueError(f"the probability of being elsewhere is {outside:g}, not between 0 and 1")
    if abs(centre_m) * 1e-15 > width_m / _CELLS:
        raise ValueError(f"a belief {width_m:g} m wide at {centre_m:g} m is below rounding")


def _normalised(edges: FloatArray, log_mass: FloatArray, outside: float) -> Belief:
    """A belief whose inside is scaled to ``1 - outside``."""
    log_inside = np.logaddexp.reduce(log_mass)
    return _frozen(edges, log_mass - log_inside + np.log1p(-outside), float(np.log(outside)))


def _scaled(edges: FloatArray, log_mass: FloatArray, log_outside: float) -> Belief:
    """A belief scaled so that inside and outside together are one."""
    total = np.logaddexp(np.logaddexp.reduce(log_mass), log_outside)
    return _frozen(edges, log_mass - total, float(log_outside - total))


def _frozen(edges: FloatArray, log_mass: FloatArray, log_outside: float) -> Belief:
    edges.setflags(write=False)
    log_mass.setflags(write=False)
    return Belief(edges, log_mass, log_outside)


def _thinned(
    edges: FloatArray, log_mass: FloatArray, keep_from_m: float, keep_to_m: float
) -> tuple[FloatArray, FloatArray]:
    """Join neighbours until the grid is small again, at first only outside the part to keep."""
    spare = (edges >= keep_from_m) & (edges <= keep_to_m)
    while log_mass.size > _MOST_CELLS:
        # Many detections in one place leave many edges there: then that part is thinned too.
        keep = spare if np.sum(spare) < _MOST_CELLS // 2 else np.zeros(edges.size, dtype=np.bool_)
        keep = keep.copy()
        keep[::2] = True
        keep[[0, -1]] = True
        begin = np.flatnonzero(keep)[:-1]
        log_mass = np.logaddexp.reduceat(log_mass, begin)
        edges, spare = edges[keep], spare[keep]
    return edges, log_mass
