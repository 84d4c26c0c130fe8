"""A scan drawn in text: eight dots a cell in braille, or two in plain ASCII.

Every column of dots covers all readings that fall into it, from the lowest to the highest: a fringe
between two columns is never lost, however many readings there are.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["Cells", "Window", "draw", "window_of"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

# Bit of each dot in a braille pattern, by (row, column); The Unicode Standard, block U+2800.
_BRAILLE_BITS = np.array([[0x01, 0x08], [0x02, 0x10], [0x04, 0x20], [0x40, 0x80]])
_ASCII_MARKS = np.array([" ", "'", ".", ":"])
_FLAT = 1e-12  # relative; below it, rounding is all that tells two values apart
_LEAST_OF_LEVEL = 0.05  # of the level: ripple below it is not blown up to fill the picture
_NOISE_SPAN = 20.0  # standard deviations that the picture spans where all is noise
_FRINGES_BELOW = 4.5  # peak to peak over standard deviation: a sine has 2.8, noise has 5 and more
_ALIKE = 1.5  # loud over quiet parts, in standard deviations: noise is alike everywhere
_PARTS = 16
_LONGEST_LINK = 12  # columns of dots that a straight line between two readings may bridge


@dataclass(frozen=True)
class Window:
    """What is seen: positions from ``left`` to ``right``, signals from ``low`` to ``high``."""

    left: float
    right: float
    low: float
    high: float


@dataclass(frozen=True)
class Cells:
    """A picture of ``rows`` strings, with ``mask`` telling which cells the envelope alone fills."""

    rows: tuple[str, ...]
    envelope: BoolArray


def window_of(x: FloatArray, signal: FloatArray) -> Window | None:
    """A window with all finite readings in it and a little room above and below.

    It fits the readings closely where there are fringes. Plain noise must not look like them: the
    window spans no less than a twentieth of the level, and no less than 20 standard deviations of
    readings that scatter alike everywhere and are no steady fringes.
    """
    usable = np.isfinite(x) & np.isfinite(signal)
    if not usable.any():
        return None
    left, right = float(x[usable].min()), float(x[usable].max())
    low, high = float(signal[usable].min()), float(signal[usable].max())
    across = 0.0 if right - left > _FLAT * max(abs(left), abs(right)) else 0.5
    left, right = left - across * _apart(left), right + across * _apart(right)
    flat = high - low <= _FLAT * max(abs(low), abs(high))
    room = _apart(high) if flat else 0.04 * (high - low)
    if not flat:
        room = max(room, 0.5 * (_least_span(x[usable], signal[usable]) - (high - low)))
    return Window(left, right, low - room, high + room)


def _least_span(x: FloatArray, signal: FloatArray) -> float:
    """What the picture spans at least, upwards; see ``window_of``."""
    level = _LEAST_OF_LEVEL * abs(float(np.median(signal)))
    if signal.size < 20 * _PARTS:
        return level
    parts = np.array_split(signal[np.argsort(x, kind="stable")], _PARTS)
    scatter = np.array([float(part.std()) for part in parts])
    quiet, loud = (float(value) for value in np.quantile(scatter, (0.25, 0.9)))
    sigma = float(np.median(scatter))
    noise = loud <= _ALIKE * quiet and float(np.ptp(signal)) > _FRINGES_BELOW * sigma
    return max(level, _NOISE_SPAN * sigma) if noise else level


def _apart(value: float) -> float:
    """A step that is seen beside ``value``, for windows that would otherwise have no width."""
    return max(1e-9, 0.01 * abs(value))


def _extents(
    x: FloatArray, signal: FloatArray, window: Window, columns: int, heights: int
) -> tuple[FloatArray, FloatArray]:
    """Lowest and highest dot of each column, shape (columns,), NaN where nothing was read."""
    lowest = np.full(columns, np.inf)
    highest = np.full(columns, -np.inf)
    order = np.argsort(x, kind="stable")
    x, signal = x[order], signal[order]
    broken = ~(np.isfinite(x) & np.isfinite(signal))
    x, signal = np.where(broken, window.left, x), np.where(broken, window.low, signal)
    place = (x - window.left) / (window.right - window.left) * (columns - 1)
    height = (signal - window.low) / (window.high - window.low) * (heights - 1)
    seen = ~broken & (place >= -0.5) & (place <= columns - 0.5)
    column = np.clip(np.rint(np.where(seen, place, 0)), 0, columns - 1).astype(int)
    np.minimum.at(lowest, column[seen], height[seen])
    np.maximum.at(highest, column[seen], height[seen])
    # Straight lines over columns that no reading fell into, unless a bad reading lies between.
    bad_before = np.cumsum(broken)
    index = np.flatnonzero(seen)
    for a, b in itertools.pairwise(index) if len(index) < 2 * columns else ():
        gap = column[b] - column[a]
        if 1 < gap <= _LONGEST_LINK and bad_before[a] == bad_before[b]:
            between = np.arange(column[a] + 1, column[b])
            line = height[a] + (height[b] - height[a]) * (between - column[a]) / gap
            lowest[between] = np.minimum(lowest[between], line)
            highest[between] = np.maximum(highest[between], line)
    # Neighbours touch, so that a steep flank is one line and not two specks.
    filled = np.isfinite(lowest)
    for k in range(1, columns):
        if filled[k] and filled[k - 1]:
            if lowest[k] > highest[k - 1]:
                lowest[k] = highest[k - 1]
            elif highest[k] < lowest[k - 1]:
                highest[k] = lowest[k - 1]
    empty = ~filled
    lowest[empty] = highest[empty] = np.nan
    return lowest, highest


def _dots(lowest: FloatArray, highest: FloatArray, heights: int) -> BoolArray:
    """Dots of shape (heights, columns), row 0 on top."""
    level = np.arange(heights)[::-1, None]
    with np.errstate(invalid="ignore"):
        return (level >= np.rint(lowest)) & (level <= np.rint(highest))


def _encoded(dots: BoolArray, braille: bool) -> NDArray[np.str_]:
    """Cells of shape (rows, columns) for dots of shape (rows * 4, columns * 2) or (rows * 2, n)."""
    if not braille:
        top, bottom = dots[0::2], dots[1::2]
        marks: NDArray[np.str_] = _ASCII_MARKS[top.astype(int) + 2 * bottom.astype(int)]
        return marks
    rows, columns = dots.shape[0] // 4, dots.shape[1] // 2
    cells = dots.reshape(rows, 4, columns, 2).transpose(0, 2, 1, 3)
    codes = (cells * _BRAILLE_BITS).sum(axis=(2, 3))
    return np.array([[chr(0x2800 + code) if code else " " for code in row] for row in codes])


def draw(
    x: FloatArray,
    signal: FloatArray,
    window: Window,
    width: int,
    rows: int,
    *,
    braille: bool,
    envelope: tuple[FloatArray, FloatArray, FloatArray] | None = None,
) -> Cells:
    """The readings, shape (n,), in ``rows`` rows of ``width`` cells.

    ``envelope`` is (x, lower, upper), each of shape (m,), drawn as a dotted line. Values that are
    not finite are gaps; arrays may be in any order.
    """
    across, down = (2, 4) if braille else (1, 2)
    columns, heights = width * across, rows * down
    dots = _dots(*_extents(x, signal, window, columns, heights), heights)
    extra = np.zeros_like(dots)
    if envelope is not None and len(envelope[0]) > 1:
        place = np.linspace(window.left, window.right, columns)
        order = np.argsort(envelope[0], kind="stable")
        at = envelope[0][order]
        for line in envelope[1:]:
            value = np.interp(place, at, line[order], left=np.nan, right=np.nan)
            height = (value - window.low) / (window.high - window.low) * (heights - 1)
            shown = np.isfinite(height) & (height >= 0) & (height <= heights - 1)
            shown &= np.arange(columns) % (2 * across) < across
            column = np.flatnonzero(shown)
            extra[heights - 1 - np.rint(height[column]).astype(int), column] = True
    cells = _encoded(dots | extra, braille)
    only_envelope = (_encoded(extra, braille) != " ") & (_encoded(dots, braille) == " ")
    return Cells(tuple("".join(row) for row in cells), only_envelope)
