"""The present scan as text: readings, the fitted envelope, and where the zero lies in it."""

from __future__ import annotations

import math

import numpy as np
from rich.text import Text

from bench.tui.figures import level
from bench.tui.scene import Scene
from bench.tui.trace import Window, draw, window_of
from bench.tui.words import title_row

__all__ = ["scan_text"]


def _ends(window: Window) -> tuple[str, str]:
    """Both ends of the axis, in millimetres of stage reading, with digits to tell them apart."""
    span_mm = (window.right - window.left) * 1e3
    digits = max(1, min(7, 2 - math.floor(math.log10(span_mm)))) if span_mm > 0 else 3
    return f"{window.left * 1e3:.{digits}f}", f"{window.right * 1e3:.{digits}f} mm stage"


def _zero_place(scene: Scene, window: Window, width: int) -> tuple[int | None, str]:
    """Column of the zero in this scan, None where there is none in it; and what to say of it."""
    located = scene.view.located
    if located is None:
        return None, ""
    if not located.found or located.zero is None:
        return None, "no packet here"
    value = located.zero.value
    if not math.isfinite(value):
        return None, ""
    share = (value - window.left) / (window.right - window.left)
    if share < 0 or share > 1:
        return None, "zero lies left of this" if share < 0 else "zero lies right of this"
    return round(share * (width - 1)), "zero"


def _axis_row(window: Window, place: int | None, words: str, width: int, scene: Scene) -> Text:
    """Ends of the axis, and a pointer to the zero between them."""
    palette, glyphs = scene.palette, scene.glyphs
    left, right = _ends(window)
    cells = list(left.ljust(width - len(right)) + right)[:width]
    start = end = 0
    if place is not None:
        label = f"{glyphs.pointer} {words}"
        start = place
        if place + len(label) > width:  # the words stand left of the pointer near the right edge
            label = f"{words} {glyphs.pointer}"
            start = place - len(label) + 1
        end = start + len(label)
        for side in (slice(0, len(left)), slice(width - len(right), width)):
            if start < side.stop + 1 and end > side.start - 1:
                cells[side] = " " * len(cells[side])
        cells[start:end] = label
    elif words:
        start = max(len(left) + 1, (width - len(words)) // 2)
        end = start + len(words)
        if end < width - len(right):
            cells[start:end] = words
    row = Text("".join(cells)[:width], style=palette.quiet)
    if end > start:
        row.stylize(f"bold {palette.zero}", start, end)
    return row


def scan_text(scene: Scene, width: int, height: int) -> Text:
    """``height`` rows: a heading with the signal's range, the picture, and the stage axis."""
    view, glyphs, palette = scene.view, scene.glyphs, scene.palette
    window = window_of(view.trace_x_m, view.trace_signal)
    rows = height - 2
    if window is None or rows < 1 or width < 8:
        words = view.trace_label or "no readings yet"
        return title_row("SCAN", width, scene, words)
    signal = view.trace_signal[np.isfinite(view.trace_signal)]
    low, high = float(signal.min()), float(signal.max())
    aside = f"{view.trace_label}  {level(low, '')} to {level(high, view.detector_unit)}".strip()
    head = title_row("SCAN", width, scene, aside, view.trace_label)
    picture = None if view.located is None or not view.located.found else view.located.picture
    envelope = None
    if picture is not None:
        envelope = (
            picture.x,
            picture.level - picture.envelope,
            picture.level + picture.envelope,
        )
    cells = draw(
        view.trace_x_m,
        view.trace_signal,
        window,
        width,
        rows,
        braille=glyphs.braille,
        envelope=envelope,
    )
    place, words = _zero_place(scene, window, width)
    drawn = []
    for index, plain in enumerate(cells.rows):
        row = Text(plain, style=palette.signal)
        for column in np.flatnonzero(cells.envelope[index]):
            row.stylize(palette.envelope, int(column), int(column) + 1)
        if place is not None and plain[place] in " \u2800":
            row.plain = plain[:place] + glyphs.marker + plain[place + 1 :]
            row.stylize(f"bold {palette.zero}", place, place + 1)
        drawn.append(row)
    return Text("\n").join([head, *drawn, _axis_row(window, place, words, width, scene)])
