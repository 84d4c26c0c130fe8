"""Follow a run in a plain terminal: a line for each thing that happens, questions as they come."""

from __future__ import annotations

import contextlib
import shutil
import signal
import sys
import textwrap
import threading
from collections.abc import Iterator
from types import FrameType

from bench.cli.output import note
from bench.errors import BenchFault, UsageError, printable
from bench.procedure.live import Question
from bench.procedure.session import RunSession
from bench.procedure.state import RunState

__all__ = ["Watcher", "signals_stop"]

LOOK_S = 0.05
REASONS: dict[int, str] = {
    signal.SIGINT: "the operator pressed Ctrl+C",
    signal.SIGTERM: "the program was asked to end (SIGTERM)",
    signal.SIGHUP: "the terminal was lost (SIGHUP)",
}
STOP_S = 30.0


@contextlib.contextmanager
def signals_stop(session: RunSession) -> Iterator[None]:
    """While inside, Ctrl-C, a termination and a lost terminal are software stops."""

    def stop(number: int, _frame: FrameType | None) -> None:
        # In a thread: a signal may arrive while this one holds a lock that stopping needs.
        reason = REASONS.get(number, f"signal {number}")
        threading.Thread(target=session.stop, args=(reason,), daemon=True).start()

    before = {number: signal.signal(number, stop) for number in REASONS}
    try:
        yield
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


class Watcher:
    """Performs ``session`` in a thread of its own and tells about it on standard error."""

    def __init__(self, session: RunSession, *, ask: bool) -> None:
        self._session = session
        self._ask = ask
        self._state: RunState | None = None
        self._thread = threading.Thread(target=self._run, name="conductor", daemon=True)
        self._done = threading.Event()

    def _run(self) -> None:
        try:
            self._state = self._session.perform()
        finally:
            self._done.set()

    def state(self) -> RunState:
        """The run's last state. Raises BenchFault if it has none."""
        if self._state is None:
            raise BenchFault("the run ended without a result", mend="look at the journal")
        return self._state

    def follow(self) -> None:
        """Until the run has ended."""
        self._thread.start()
        asked, told = "", 0
        while not self._done.wait(LOOK_S):
            told = self._tell(told)
            view = self._session.view()
            if view.question is not None and self._ask and view.question.id != asked:
                asked = view.question.id
                threading.Thread(target=self._put, args=(view.question,), daemon=True).start()
        self._tell(told)
        self._thread.join()

    def _tell(self, told: int) -> int:
        for time_s, text in self._session.told(told):
            _note_wrapped(f"{time_s:8.1f} s  ", text)
            told += 1
        return told

    def end(self) -> None:
        """Whatever ended the watching, nothing is left moving behind it. Idempotent."""
        if not self._done.is_set():
            self._session.stop("nobody watches the run any more")
            self._thread.join(timeout=STOP_S)

    def _put(self, question: Question) -> None:
        """Ask at the terminal, in a thread of its own: a stop need not wait for an answer."""
        note(f"\n{printable(question.title)}")
        for line in question.lines:
            _note_wrapped("  - ", printable(line, 400))
        _forget_what_was_typed()
        wants = "Your name: " if question.kind == "acknowledge" else "yes or no: "
        while not self._done.is_set():
            with contextlib.suppress(OSError):
                sys.stderr.write(wants)
                sys.stderr.flush()
            try:
                text = sys.stdin.readline()
            except OSError:
                text = ""
            if not text:
                self._session.stop("the terminal was closed")
                return
            word = text.strip()
            try:
                if question.kind == "acknowledge":
                    self._session.answer(question.id, word)
                elif word.lower() in {"yes", "y", "no", "n"}:
                    self._session.answer(question.id, word.lower().startswith("y"))
                else:
                    continue
            except UsageError as error:
                note(error.what)
                continue
            return


def _forget_what_was_typed() -> None:
    """Keys that were hit before the question was there are no answers to it."""
    with contextlib.suppress(ImportError, OSError, ValueError):
        import termios

        termios.tcflush(sys.stdin, termios.TCIFLUSH)


def _note_wrapped(lead: str, text: str) -> None:
    width = max(40, shutil.get_terminal_size().columns)
    indent = " " * len(lead)
    note(textwrap.fill(text, width - 1, initial_indent=lead, subsequent_indent=indent))
