"""Widgets: places on the screen that redraw only what changed, and the one place for questions."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

from rich.text import Text
from textual.app import ComposeResult
from textual.containers import Horizontal, Vertical, VerticalScroll
from textual.events import Resize
from textual.widgets import Input, Static

from bench.tui.scene import Scene
from bench.tui.views import question_hint, question_lines
from bench.tui.words import fitted, title_row

if TYPE_CHECKING:
    from bench.procedure.live import Question

__all__ = ["LONGEST_NAME", "Panel", "QuestionPanel"]

LONGEST_NAME = 80


class Panel(Static):
    """Text painted for the size there is; nothing is sent to the terminal when nothing changed."""

    def __init__(self, paint: Callable[[int, int], Text], *, id: str, grows: bool = False) -> None:
        super().__init__(Text(" "), id=id, markup=False)
        self._paint = paint
        self._grows = grows
        self._shown: Text | None = None

    def repaint(self) -> None:
        """Paint again. With ``grows`` the height follows the number of rows."""
        width, height = self.size.width, self.size.height
        if width < 1:
            return
        text = self._paint(width, height)
        if text == self._shown:
            return
        self._shown = text
        if self._grows:
            rows = text.plain.count("\n") + 1
            if rows != height:
                self.styles.height = rows
        self.update(text, layout=False)

    @property
    def settled(self) -> bool:
        """Whether the last rows painted have all been given their place."""
        rows = 0 if self._shown is None else self._shown.plain.count("\n") + 1
        return 0 < rows <= self.size.height

    def unsettle(self) -> None:
        """What was painted belongs to something else now."""
        self._shown = None

    def on_resize(self, _: Resize) -> None:
        self._shown = None
        self.repaint()


class QuestionPanel(Vertical):
    """What only a person can answer: its words, to be scrolled, and a line for a name."""

    def __init__(self, scene: Callable[[], Scene]) -> None:
        super().__init__(id="question")
        self._scene = scene
        self._question: Question | None = None
        self._read_to_end = False

    def compose(self) -> ComposeResult:
        yield Panel(self._title, id="question-title")
        with VerticalScroll(id="question-scroll", can_focus=False):
            yield Panel(self._words, id="question-words", grows=True)
        yield Panel(self._hint, id="question-hint")
        with Horizontal(id="question-line"):
            yield Static("your name ", id="question-label")
            line = Input(id="question-name", max_length=LONGEST_NAME, select_on_focus=False)
            line.cursor_blink = False  # nothing is redrawn while nothing happens
            yield line

    def _title(self, width: int, _: int) -> Text:
        asked = self._scene().question
        title = self._scene().glyphs.text(asked.title if asked else "").upper()
        return title_row(
            fitted(title, width - 2, self._scene().glyphs).rstrip(), width, self._scene()
        )

    def _words(self, width: int, _: int) -> Text:
        scene = self._scene()
        return Text("\n".join(question_lines(scene, width)), style=scene.palette.text)

    def _hint(self, width: int, _: int) -> Text:
        return question_hint(self._scene(), width)

    @property
    def _scroller(self) -> VerticalScroll:
        return self.query_one("#question-scroll", VerticalScroll)

    @property
    def read_to_end(self) -> bool:
        """Whether the last row has been on the screen since this question was opened."""
        words = self.query_one("#question-words", Panel)
        shown = words.settled and self._scroller.size.height > 0
        if self._question is not None and shown and not self.more_below:
            self._read_to_end = True
        return self._read_to_end

    @property
    def more_below(self) -> bool:
        """Whether rows are hidden below now."""
        scroller = self._scroller
        return scroller.max_scroll_y - scroller.scroll_target_y > 0.5

    def show(self, question: Question | None) -> None:
        """Open, change or close; a new question begins unread and with an empty line."""
        fresh = question is not None and (
            self._question is None or self._question.id != question.id
        )
        self._question = question
        self.display = question is not None
        line = self.query_one("#question-name", Input)
        if question is None:
            if line.has_focus:
                self.screen.set_focus(None)
            return
        typed = question.kind == "acknowledge"
        self.query_one("#question-line").display = typed
        if fresh:
            self._read_to_end = False
            self.query_one("#question-words", Panel).unsettle()
            line.value = ""
            self._scroller.scroll_home(animate=False, immediate=True)
        if typed and not line.has_focus:
            line.focus(scroll_visible=False)
        elif not typed and line.has_focus:
            self.screen.set_focus(None)
        for panel in self.query(Panel):
            panel.repaint()

    def scroll_by(self, rows: int) -> None:
        """Scroll the words; ``rows`` counts down."""
        self._scroller.scroll_relative(y=rows, animate=False, immediate=True)

    @property
    def page(self) -> int:
        """Rows that are seen at once."""
        return max(1, self._scroller.size.height - 1)
