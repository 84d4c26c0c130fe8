"""The slow level under the fringes, and readings that cannot be trusted."""

from __future__ import annotations

import itertools

import numpy as np

from bench.fringes.model import BoolArray, FloatArray


def robust_spread(values: FloatArray) -> float:
    """Standard deviation by the median absolute deviation (times 1.4826, for normal noise)."""
    if values.size == 0:
        return 0.0
    return float(1.4826 * np.median(np.abs(values - np.median(values))))


def slow_level(x: FloatArray, signal: FloatArray, length: float, least: int = 9) -> FloatArray:
    """Medians over cells of ``length`` joined by straight lines, at every ``x`` (rising).

    Cells are made longer where they would hold fewer than ``least`` readings on average.
    """
    span = float(x[-1] - x[0])
    count = int(min(max(1, round(span / max(length, 1e-300))), max(1, x.size // least)))
    if count < 3:
        return np.full_like(signal, np.median(signal))
    cell = np.minimum(((x - x[0]) / span * count).astype(np.int64), count - 1)
    edges = np.searchsorted(cell, np.arange(count + 1))
    centres, levels = [], []
    for start, stop in itertools.pairwise(edges):
        if stop - start >= 3:
            centres.append(float(np.mean(x[start:stop])))
            levels.append(float(np.median(signal[start:stop])))
    if len(centres) < 2:
        return np.full_like(signal, np.median(signal))
    return np.asarray(np.interp(x, centres, levels), dtype=np.float64)


def flat_tops(signal: FloatArray) -> BoolArray:
    """Readings stuck at the extreme value, recognised by how many share it.

    A converter's own steps also make equal readings, so an extreme counts as a flat top only where
    it is met at least five times, twice as often as the ten next values together expect it.
    """
    marked = np.zeros(signal.size, dtype=bool)
    if signal.size < 20:
        return marked
    values, counts = np.unique(signal, return_counts=True)
    if values.size < 12:
        return marked
    for edge, neighbours in ((-1, slice(-11, -1)), (0, slice(1, 11))):
        usual = float(np.mean(counts[neighbours]))
        if counts[edge] >= 5 and counts[edge] > 4.0 * usual:
            marked |= signal == values[edge]
    return marked


def lone_spikes(signal: FloatArray, limit: float = 8.0) -> BoolArray:
    """Single readings far from all their neighbours, in the order of position.

    A reading is a spike where it leaves the range of its eight neighbours by more than ``limit``
    times the usual distance from them, here and in the whole scan, and by more than twice that
    range. Fringes, sampled finely or coarsely, stay comparable with their neighbours.
    """
    n = signal.size
    marked = np.zeros(n, dtype=bool)
    if n < 16:
        return marked
    reach = 4
    padded = np.pad(signal, reach, mode="reflect")
    near = np.stack([padded[i : i + n] for i in range(2 * reach + 1) if i != reach])
    high, low = near.max(axis=0), near.min(axis=0)
    outside = np.maximum(signal - high, low - signal)
    apart = np.abs(signal - np.median(near, axis=0))
    size = 24
    blocks = np.pad(apart, (0, -n % size), mode="edge").reshape(-1, size)
    here = np.repeat(np.median(blocks, axis=1), size)[:n]
    scale = 1.4826 * np.maximum(here, np.median(apart))
    return np.asarray(
        (outside > limit * np.maximum(scale, 1e-300)) & (outside > 2.0 * (high - low)),
        dtype=np.bool_,
    )
