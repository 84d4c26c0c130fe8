"""Everything that a screen shows at one moment, and what it amounts to."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

from bench.tui.glyphs import FULL, Glyphs
from bench.tui.palette import DARK, Palette

if TYPE_CHECKING:
    from bench.procedure.live import LiveView, Question

__all__ = ["OUTCOME_WORDS", "Phase", "Scene"]

Phase = Literal["ready", "ask", "run", "stopping", "leaving", "done", "not begun"]

OUTCOME_WORDS = {
    "accepted": "ACCEPTED",
    "rejected": "REJECTED",
    "not found": "NOT FOUND",
    "stopped": "STOPPED",
    "fault": "FAULT",
}


@dataclass(frozen=True)
class Scene:
    """The run's own snapshot, and what the screen adds: what was pressed, and how to draw.

    ``question`` is the one to be answered now; an answer that is on its way closes it at once.
    ``note`` is a short remark on the last key, such as what is missing in an answer. ``scrolled``
    counts the rows of a long reason that lie above the first one shown. ``no_colour``: whoever
    started the program asked for none.
    """

    view: LiveView
    started: bool = False
    finished: bool = False
    stop_asked: bool = False
    asking_to_leave: bool = False
    question: Question | None = None
    note: str = ""
    more_below: bool = False
    scrolled: int = 0
    no_colour: bool = False
    glyphs: Glyphs = FULL
    palette: Palette = DARK

    @property
    def phase(self) -> Phase:
        if self.finished:
            return "done"
        if self.asking_to_leave:
            return "leaving"
        if self.stop_asked:
            return "stopping" if self.started else "not begun"
        if not self.started:
            return "ready"
        return "ask" if self.question is not None else "run"

    @property
    def measured(self) -> bool:
        """Whether the zero was measured; before that it is only expected somewhere."""
        view = self.view
        return view.zero_m is not None and view.zero_standard_uncertainty_m is not None
