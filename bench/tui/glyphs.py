"""The marks that pictures are made of: the full set, and one for terminals that know only ASCII."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass

__all__ = ["ASCII", "FULL", "Glyphs", "glyphs_for"]

_MICRO = re.compile(r"(?<=[\d)] )um\b")  # programs write um, people read µm

_PLAIN = {
    "±": "+-",
    "µ": "u",
    "μ": "u",
    "·": "-",
    "–": "-",
    "—": "-",
    "…": "~",
    "×": "x",
    "°": " deg ",
    "’": "'",
    "“": '"',
    "”": '"',
    "\u2009": " ",
    "\u202f": " ",
    "\u00a0": " ",
}


@dataclass(frozen=True)
class Glyphs:
    """One set of marks; ``braille`` says whether traces may use eight dots a cell."""

    braille: bool
    rule: str
    step_open: str
    step_now: str
    step_done: str
    step_failed: str
    bar_full: str
    bar_empty: str
    scale: str
    tick: str
    left_end: str
    right_end: str
    left_jaw: str
    right_jaw: str
    jaw_fill: str
    centre: str
    goal: str
    marker: str
    pointer: str
    up: str
    down: str

    def text(self, words: str) -> str:
        """``words`` as this terminal can show them."""
        if self.braille:
            return _MICRO.sub("µm", words)
        plain = "".join(_PLAIN.get(ch, ch) for ch in words)
        return plain.encode("ascii", "replace").decode("ascii")


FULL = Glyphs(
    braille=True,
    rule="─",
    step_open="○",
    step_now="▶",
    step_done="✓",
    step_failed="✗",
    bar_full="█",
    bar_empty="░",
    scale="─",
    tick="┴",
    left_end="└",
    right_end="┘",
    left_jaw="┣",
    right_jaw="┫",
    jaw_fill="━",
    centre="┃",
    goal="▲",
    marker="┊",
    pointer="▲",
    up="↑",
    down="↓",
)

ASCII = Glyphs(
    braille=False,
    rule="-",
    step_open="[ ]",
    step_now="[>]",
    step_done="[x]",
    step_failed="[!]",
    bar_full="#",
    bar_empty=".",
    scale="-",
    tick="+",
    left_end="+",
    right_end="+",
    left_jaw="[",
    right_jaw="]",
    jaw_fill="=",
    centre="|",
    goal="^",
    marker="|",
    pointer="^",
    up="Up",
    down="Down",
)


def glyphs_for(environment: Mapping[str, str], encoding: str | None) -> Glyphs:
    """ASCII where the encoding is not UTF-8, or where the terminal's font is known to be small."""
    name = (encoding or "").lower().replace("-", "").replace("_", "")
    small = environment.get("TERM", "dumb") in {"", "dumb", "linux", "vt100", "vt220", "ansi"}
    return FULL if name == "utf8" and not small else ASCII
