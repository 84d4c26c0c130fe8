"""The terminal UI: one Run screen over one run, and its keys.

The run is performed elsewhere (``RunControl``); this asks for a snapshot ten times a second and
shows it. Nothing here may stop or move anything by accident, and the stop key works in every state.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import replace
from typing import ClassVar

from rich.text import Text
from textual.app import App, ComposeResult
from textual.binding import Binding, BindingType
from textual.containers import Horizontal, Vertical
from textual.events import Key
from textual.theme import Theme
from textual.widgets import Input

from bench.errors import EvenarmError, printable
from bench.tui.control import RunControl
from bench.tui.glyphs import FULL, Glyphs
from bench.tui.next_view import BAR_ROWS, end_rows, next_text
from bench.tui.palette import PALETTES, Palette
from bench.tui.panels import Panel, QuestionPanel
from bench.tui.scan_view import scan_text
from bench.tui.scene import Scene
from bench.tui.views import bench_text, foot_text, head_text, steps_text, zero_text

__all__ = ["EvenarmApp"]

POLL_S = 0.1
ARMED_AFTER_S = 0.4
"""A yes or no counts only so long after its question came up: a key hit twice answers once."""


def _theme(palette: Palette) -> Theme:
    return Theme(
        name=palette.name,
        dark=palette.dark,
        primary=palette.text,
        foreground=palette.text,
        background=palette.background,
        surface=palette.background,
        panel=palette.calm_bar,
        success=palette.good,
        warning=palette.warn,
        error=palette.bad,
        variables={
            "line-background": palette.calm_bar,
            "line-text": palette.calm_text,
            "input-cursor-background": palette.calm_text,
            "input-cursor-foreground": palette.calm_bar,
            "input-selection-background": palette.act_bar,
        },
    )


class EvenarmApp(App[int]):
    """One run on the screen. ``run()`` returns after the operator has left; see ``exit_status``."""

    ENABLE_COMMAND_PALETTE = False
    AUTO_FOCUS = None  # the line for a name takes keys only while a name is asked for
    TITLE = "Evenarm"

    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("f8,ctrl+c", "software_stop", "software stop", priority=True),
        Binding("ctrl+q", "leave", "leave", priority=True),
        Binding("f4", "colours", "colours", priority=True),
        Binding("q,Q", "leave_at_end", "leave", priority=True),
        Binding("q,Q", "leave", "leave"),
        Binding("enter", "begin", "start"),
        Binding("y,Y", "say(True)", "yes"),
        Binding("n,N", "say(False)", "no"),
        Binding("up", "scroll_words(-1)", priority=True),
        Binding("down", "scroll_words(1)", priority=True),
        Binding("pageup", "page_words(-1)", priority=True),
        Binding("pagedown", "page_words(1)", priority=True),
    ]

    CSS = """
    Screen { background: $background; color: $foreground; layers: base; overflow: hidden; }
    #head { height: 1; }
    #next { height: 4; }
    #body { height: 1fr; }
    #left { width: 1fr; min-width: 24; max-width: 38; padding: 0 1 0 1; }
    #right { width: 2fr; padding: 0 1 0 1; }
    #steps { height: 1fr; }
    #bench { height: 8; }
    #zero { height: 8; margin: 0 0 0 0; }
    #scan { height: 1fr; }
    #foot { height: 1; dock: bottom; }
    #question { height: 1fr; display: none; }
    #question-title, #question-hint { height: 1; }
    #question-scroll { height: 1fr; scrollbar-size: 0 0; background: $background; }
    #question-words { height: auto; }
    #question-line { height: 1; }
    #question-label { width: 10; }
    #question-name, #question-name:focus {
        height: 1; border: none; padding: 0 1;
        background: $line-background; color: $line-text; background-tint: transparent;
    }
    """

    def __init__(
        self,
        control: RunControl,
        *,
        glyphs: Glyphs = FULL,
        beat: Callable[[], None] = lambda: None,
        now_s: Callable[[], float] = time.monotonic,
    ) -> None:
        super().__init__()
        for palette in PALETTES:
            self.register_theme(_theme(palette))
        self.theme = PALETTES[0].name
        self._control = control
        self._beat = beat
        self._now_s = now_s
        self._answered: set[str] = set()
        self._asked_since: tuple[str, float] = ("", 0.0)
        self._leave_when_done: int | None = None
        self._leave_now: int | None = None
        self.failure: BaseException | None = None
        self.scene = Scene(control.view(), glyphs=glyphs, no_colour=self.no_color)
        self._look()

    # --- what is shown ---------------------------------------------------------------------------

    def compose(self) -> ComposeResult:
        yield Panel(lambda width, _: head_text(self.scene, width), id="head")
        yield Panel(
            lambda width, _: next_text(self.scene, width, self._most), id="next", grows=True
        )
        with Horizontal(id="body"):
            with Vertical(id="left"):
                yield Panel(lambda w, h: steps_text(self.scene, w, h), id="steps")
                yield Panel(lambda w, _: bench_text(self.scene, w), id="bench", grows=True)
            with Vertical(id="right"):
                yield Panel(self._zero, id="zero", grows=True)
                yield Panel(lambda w, h: scan_text(self.scene, w, h), id="scan")
                yield QuestionPanel(lambda: self.scene)
        yield Panel(lambda width, _: foot_text(self.scene, width), id="foot")

    @property
    def _most(self) -> int:
        """Rows that the outcome and its reason may take: all between the first and the last."""
        return max(BAR_ROWS + 1, self.size.height - 2)

    def _zero(self, width: int, _: int) -> Text:
        body = self.size.height - 2 - self.screen_stack[0].query_one("#next").size.height
        compact = body < (26 if self.scene.question is not None else 14)
        return zero_text(self.scene, width, compact=compact)

    def on_mount(self) -> None:
        self.set_interval(POLL_S, self.poll)
        self.call_after_refresh(self.poll)

    def _look(self) -> None:
        """Take a fresh snapshot of the run."""
        control = self._control
        finished = control.finished
        view = control.view()
        asked = view.question
        if asked is not None and (asked.id in self._answered or finished or self.scene.stop_asked):
            asked = None
        if asked is not None and asked.id != self._asked_since[0]:
            self._asked_since = (asked.id, self._now_s())
            self.scene = replace(self.scene, note="")
        elif asked is None and self.scene.question is not None:
            self.scene = replace(self.scene, note="", more_below=False)
        leaving = self.scene.asking_to_leave and not finished
        self.scene = replace(
            self.scene,
            view=view,
            started=control.started,
            finished=finished,
            question=asked,
            asking_to_leave=leaving,
        )

    def poll(self) -> None:
        """Look at the run and show it, or leave if that is due."""
        self._beat()
        if self._leave_now is not None:
            self.exit(self._leave_now)
            return
        self._look()
        if self.scene.finished and self._leave_when_done is not None:
            self.exit(self._leave_when_done)
            return
        self._show()

    def _show(self) -> None:
        if not self.screen_stack or not self.screen_stack[0].query("#foot"):
            return  # not put together yet, or taken down already
        base = self.screen_stack[0]
        panel = base.query_one(QuestionPanel)
        asking = self.scene.question is not None
        base.query_one("#scan").display = not asking
        panel.show(self.scene.question if not self.scene.asking_to_leave else None)
        if asking:
            read = panel.read_to_end
            note = "" if read and self.scene.note == self._unread_note else self.scene.note
            self.scene = replace(self.scene, more_below=panel.more_below, note=note)
        for part in base.query(Panel):
            part.repaint()

    def refresh_scene(self) -> None:
        """Show at once what a key has changed, without waiting for the next look."""
        self._look()
        self._show()

    # --- keys ------------------------------------------------------------------------------------

    def action_software_stop(self) -> None:
        """Stop, at once, in every state."""
        self._control.stop("software stop pressed")
        self.scene = replace(self.scene, stop_asked=True, asking_to_leave=False)
        self.refresh_scene()

    def action_begin(self) -> None:
        if self.scene.phase == "ready":
            self._attempt(self._control.start)
        else:
            self._wants_yes_or_no()

    def on_key(self, event: Key) -> None:
        """A key that means nothing here; where yes or no is asked for, it is told."""
        self._wants_yes_or_no()

    def _wants_yes_or_no(self) -> None:
        asked = self.scene.question
        confirm = self.scene.phase == "ask" and asked is not None and asked.kind == "confirm"
        if confirm or self.scene.phase == "leaving":
            self._remark("Press Y or N.")

    def action_say(self, yes: bool) -> None:
        """Yes or no: to leaving where that is asked, else to the question that is open."""
        asked = self.scene.question
        if self.scene.asking_to_leave:
            self.scene = replace(self.scene, asking_to_leave=False)
            if yes:
                self._control.stop("the operator left")
                self.scene = replace(self.scene, stop_asked=True)
                self._leave_when_done = 130
        elif asked is not None and asked.kind == "confirm":
            if self._now_s() - self._asked_since[1] < ARMED_AFTER_S:
                return
            if not self._read_to_end():
                return
            self._answer(asked.id, yes)
        self.refresh_scene()

    def on_input_submitted(self, event: Input.Submitted) -> None:
        asked = self.scene.question
        if asked is None or asked.kind != "acknowledge" or self.scene.asking_to_leave:
            return
        name = printable(event.value).strip()
        if not self._read_to_end():
            return
        if not any(ch.isalpha() for ch in name):
            self._remark("Type your name first.")
            return
        self._answer(asked.id, name)
        self.refresh_scene()

    def _read_to_end(self) -> bool:
        if self.screen_stack[0].query_one(QuestionPanel).read_to_end:
            return True
        self._remark(self._unread_note)
        return False

    @property
    def _unread_note(self) -> str:
        return f"Read to the end first: {self.scene.glyphs.down} key."

    def _remark(self, words: str) -> None:
        self.scene = replace(self.scene, note=words)
        self.refresh_scene()

    def _answer(self, question_id: str, value: str | bool) -> None:
        self._answered.add(question_id)
        self._attempt(lambda: self._control.answer(question_id, value))

    def _attempt(self, act: Callable[[], None]) -> None:
        """Do what may be refused; a refusal ends the screen and is told after it."""
        try:
            act()
        except EvenarmError as error:
            self.failure = error
            self._control.stop("the run could not go on")
            self.exit(error.exit_status)
        else:
            self.refresh_scene()

    def check_action(self, action: str, parameters: tuple[object, ...]) -> bool | None:
        """Once the run has ended a letter is part of no name, whatever has the focus still."""
        return self.scene.phase == "done" if action == "leave_at_end" else True

    def action_leave_at_end(self) -> None:
        self.action_leave()

    def action_leave(self) -> None:
        """Leave at once where nothing runs; else ask, because leaving means stopping first."""
        if not self.scene.started or self.scene.finished:
            self.exit(self.outcome_status())
            return
        self.scene = replace(self.scene, asking_to_leave=not self.scene.stop_asked)
        if self.scene.stop_asked:
            self._leave_when_done = 130
        self.refresh_scene()

    def action_colours(self) -> None:
        if self.scene.no_colour:
            return
        names = [palette.name for palette in PALETTES]
        index = (names.index(self.theme) + 1) % len(names)
        self.theme = names[index]
        self.scene = replace(self.scene, palette=PALETTES[index])
        self._show()

    def action_scroll_words(self, rows: int) -> None:
        if self.scene.question is not None:
            self.screen_stack[0].query_one(QuestionPanel).scroll_by(rows)
            self.scene = replace(self.scene, note="")
            self.refresh_scene()
        elif self.scene.phase == "done":
            beyond = len(end_rows(self.scene, self.size.width)) + BAR_ROWS - self._most
            scrolled = max(0, min(self.scene.scrolled + rows, beyond))
            self.scene = replace(self.scene, scrolled=scrolled)
            self.refresh_scene()

    def action_page_words(self, pages: int) -> None:
        panel = self.screen_stack[0].query_one(QuestionPanel)
        self.action_scroll_words(pages * panel.page)

    # --- the end ---------------------------------------------------------------------------------

    def outcome_status(self) -> int:
        """Exit status for where the run stands now."""
        if not self.scene.started:
            return 130 if self.scene.stop_asked else 0
        statuses = {"accepted": 0, "rejected": 1, "not found": 1, "stopped": 130}
        return statuses.get(self.scene.view.outcome or "", 3)

    def leave_from_outside(self, status: int) -> None:
        """End the screen at the next look. May be called by any thread, at any time."""
        self._leave_now = status

    def _handle_exception(self, error: Exception) -> None:
        # A part of the screen failed. Whatever moves is stopped before anything else is done.
        self.failure = self.failure or error
        self._control.stop("the screen failed")
        super()._handle_exception(error)

    def _fatal_error(self) -> None:
        # No traceback with local values on the terminal: ``run_app`` tells what happened.
        self._close_messages_no_wait()
