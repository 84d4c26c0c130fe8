"""Hum: steady lines that run through the whole scan, taken out before the packet is fitted.

Mains frequency in a sweep at constant speed is a steady line along the position. It is learnt from
the readings outside the packet, where it can be told from fringes by being the same everywhere.
"""

from __future__ import annotations

import math

import numpy as np

from bench.fringes.model import BoolArray, FloatArray
from bench.fringes.spectrum import polynomial

MOST_LINES = 4
LEAST_OUTSIDE = 120
POWER_OVER_MEDIAN = 25.0
STEADY = 0.35
LEAST_CYCLES = 6  # in a scan: slower is drift
SMOOTH_ORDER = 8


def remove_lines(
    u: FloatArray,
    flat: FloatArray,
    outside: BoolArray,
    spare: tuple[float, float] | None = None,
) -> FloatArray:
    """What to subtract from the readings, shape (n,): zero where no steady line is found.

    ``u`` rising; ``flat`` with the slow level removed; ``outside`` marks readings off the packet.
    Lines within the band ``spare`` (as sampled, folded where it is undersampled) are left alone.
    Only nearly even spacing is handled; elsewhere hum is left to the uncertainty.
    """
    n = u.size
    found = np.zeros(n)
    gaps = np.diff(u)
    usual = float(np.median(gaps))
    if int(outside.sum()) < LEAST_OUTSIDE or usual <= 0.0:
        return found
    if float(np.percentile(np.abs(gaps - usual), 90)) > 0.3 * usual:
        return found
    count = 1 << math.ceil(math.log2(2 * n))
    cell = np.minimum(np.round((u - u[0]) / usual).astype(np.int64), count - 1)
    flat = flat - _smooth(u, flat, outside)
    rest = np.where(outside, flat, 0.0)
    kept = _bins_of(spare, count, usual, n)
    for _ in range(MOST_LINES):
        filled = np.bincount(cell, rest, minlength=count)[:count]
        power = np.abs(np.fft.rfft(filled)) ** 2
        usual_power = float(np.median(power))
        power[: LEAST_CYCLES * count // n] = 0.0
        power[kept[: power.size]] = 0.0
        top = int(np.argmax(power))
        if power[top] <= POWER_OVER_MEDIAN * usual_power or top == 0 or top >= power.size - 1:
            break
        a, b, c = np.sqrt(power[top - 1 : top + 2])
        bend = float(a - 2.0 * b + c)
        shift = 0.5 * float(a - c) / bend if bend < 0.0 else 0.0
        frequency = (top + max(-0.5, min(0.5, shift))) / (count * usual)
        line = _steady_line(u, rest, outside, frequency)
        if line is None:
            break
        found += line
        rest = np.where(outside, flat - found, 0.0)
    return found


def _smooth(u: FloatArray, flat: FloatArray, outside: BoolArray) -> FloatArray:
    """What is left of the slow level: a polynomial through the readings outside the packet."""
    columns = polynomial(u, SMOOTH_ORDER)
    part = columns[outside]
    gram = part.T @ part
    gram += 1e-9 * float(np.trace(gram)) * np.eye(gram.shape[0])
    return np.asarray(columns @ np.linalg.solve(gram, part.T @ flat[outside]), dtype=np.float64)


def _bins_of(band: tuple[float, float] | None, count: int, step: float, readings: int) -> BoolArray:
    """Bins of the transform where the band, a fifth wider than given, shows sampled at step."""
    marked = np.zeros(count // 2 + 1, dtype=bool)
    if band is None:
        return marked
    middle, half = 0.5 * (band[0] + band[1]), 0.6 * (band[1] - band[0])
    cycles = np.linspace(middle - half, middle + half, 4 * count) * step
    folded = np.abs(cycles - np.round(cycles))
    marked[np.round(folded * count).astype(np.int64)] = True
    reach = max(1, 2 * count // readings)
    wide = np.convolve(marked, np.ones(2 * reach + 1), mode="same") > 0.5
    return np.asarray(wide, dtype=np.bool_)


def _steady_line(
    u: FloatArray, rest: FloatArray, outside: BoolArray, frequency: float
) -> FloatArray | None:
    """The line at ``frequency`` at every ``u``; None where its halves do not agree."""
    wave = np.exp(2j * np.pi * frequency * u)
    columns = np.stack([wave.real, wave.imag], axis=1)

    def fit(keep: BoolArray) -> FloatArray:
        part = columns[keep]
        gram = part.T @ part + 1e-12 * np.eye(2)
        return np.asarray(np.linalg.solve(gram, part.T @ rest[keep]), dtype=np.float64)

    index = np.nonzero(outside)[0]
    first = np.zeros(u.size, dtype=bool)
    first[index[: index.size // 2]] = True
    whole, one, two = fit(outside), fit(first), fit(outside & ~first)
    size = float(np.hypot(*whole))
    if max(float(np.hypot(*(one - whole))), float(np.hypot(*(two - whole)))) > STEADY * size:
        return None
    return np.asarray(columns @ whole, dtype=np.float64)
