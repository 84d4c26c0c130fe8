"""Words for the room there is: wrapped, or ended with a mark where they had to be cut.

A unit never leaves its number, and digits in groups stay together.
"""

from __future__ import annotations

import re
import textwrap
from collections.abc import Sequence

from rich.cells import cell_len, set_cell_size
from rich.text import Text

from bench.errors import printable
from bench.tui.glyphs import Glyphs
from bench.tui.scene import Scene

__all__ = ["first_that_fits", "fitted", "title_row", "wrapped"]

LONGEST = 2000
# A space that belongs to a quantity: before a unit, between groups of three digits, around +-.
_TIED = re.compile(
    r"(?<=[\d)]) (?=(?:[nmuµkM]?[mVWAs]|Hz|deg|%|\d{1,3})(?:\W|$))|(?:(?<=±)|(?<=\+-)) (?=\d)"
)
_TIE = "\u00a0"  # textwrap does not break here


def wrapped(words: str, width: int, glyphs: Glyphs, *, most: int | None = None) -> list[str]:
    """``words`` in rows of ``width`` columns; beyond ``most`` rows the last ends in a mark."""
    text = _TIED.sub(_TIE, glyphs.text(printable(words, LONGEST)))
    rows = textwrap.wrap(text, max(4, width), break_on_hyphens=False)
    rows = [row.replace(_TIE, " ") for row in rows]
    if most is not None and len(rows) > most:
        rows = [*rows[: most - 1], _marked(rows[most - 1], width, glyphs)] if most > 0 else []
    return [row for part in rows for row in _halved(part, width, glyphs)]


def _halved(row: str, width: int, glyphs: Glyphs) -> list[str]:
    """Wide letters take two columns, which ``textwrap`` does not count."""
    return [row] if cell_len(row) <= max(4, width) else [fitted(row, width, glyphs)]


def _marked(row: str, width: int, glyphs: Glyphs) -> str:
    """``row`` with a mark that more would follow."""
    mark = glyphs.text("…")
    kept = row if cell_len(row) + 2 <= width else row.rpartition(" ")[0]
    return f"{kept or row[: max(0, width - 2)]} {mark}"


def fitted(words: str, width: int, glyphs: Glyphs) -> str:
    """``words`` in exactly ``width`` columns, with a mark where something was cut off."""
    words = glyphs.text(printable(words, LONGEST))
    if cell_len(words) > width > 1:
        return set_cell_size(words, width - 1) + glyphs.text("…")
    return set_cell_size(words, max(width, 0))


def first_that_fits(variants: Sequence[str], width: int, glyphs: Glyphs) -> str:
    """The first, longest of ``variants`` that fits whole; else the last with a mark."""
    shown = [glyphs.text(printable(words, LONGEST)) for words in variants]
    whole = next((words for words in shown if cell_len(words) <= width), None)
    return whole if whole is not None else fitted(variants[-1], width, glyphs)


def title_row(title: str, width: int, scene: Scene, *asides: str) -> Text:
    """The heading of a part: its name, the longest remark that fits, and a line to the edge."""
    glyphs, palette = scene.glyphs, scene.palette
    row = Text(glyphs.text(f"{title} "), style=f"bold {palette.text}")
    room = width - cell_len(row.plain)
    for aside in asides:
        remark = glyphs.text(printable(aside))
        if remark and cell_len(remark) <= room:
            row.append(f"{remark} "[:room], style=palette.quiet)
            room -= min(room, cell_len(remark) + 1)
            break
    row.append(glyphs.rule * max(0, room), style=palette.quiet)
    row.truncate(width)
    return row
