"""Put a run on this terminal, and leave both in good order. The screen library is loaded here."""

from __future__ import annotations

import os
import sys
import traceback

from bench.errors import EvenarmError, UsageError, printable
from bench.tui.control import RunControl

__all__ = ["require_terminal", "run_app"]

CLOSE_S = 10.0
EXIT_FAULT = 3


def require_terminal() -> None:
    """Raise UsageError where there is no terminal to draw on."""
    streams = (("standard input", sys.stdin), ("standard output", sys.stdout))
    # The screen library draws on standard error, so that has to be a terminal as well.
    for name, stream in (*streams, ("standard error", sys.__stderr__)):
        try:
            there = stream is not None and stream.isatty()
        except ValueError:  # closed
            there = False
        if not there:
            raise UsageError(
                "The screen needs a terminal",
                where=name,
                why=f"{name} is not a terminal",
                mend="run it in a terminal, or without a screen: "
                "evenarm run path-equalisation --unattended",
            )


def run_app(control: RunControl) -> int:
    """Show the run until the operator leaves; returns the exit status.

    0 accepted, or left before a run was begun; 1 rejected or not found; 3 a fault; 130 stopped by
    the operator; 128 + n after signal n. Whatever happens, nothing is left moving. Raises
    UsageError without a terminal, and any EvenarmError with which the run refused to go on.
    """
    require_terminal()
    from bench.tui.app import EvenarmApp
    from bench.tui.glyphs import glyphs_for
    from bench.tui.leave import Watch, watched_signals

    wanted: list[int] = []
    shown: list[EvenarmApp] = []

    def ask_to_leave(status: int) -> None:
        wanted.append(status)
        for app in shown:
            app.leave_from_outside(status)

    watch = Watch(control, ask_to_leave)
    failure: BaseException | None = None
    status: int | None = None
    with watched_signals(watch):
        watch.start()
        try:
            glyphs = glyphs_for(os.environ, getattr(sys.__stderr__, "encoding", None))
            app = EvenarmApp(control, glyphs=glyphs, beat=watch.beat)
            shown.append(app)
            if not wanted:
                status = app.run(mouse=False)
                failure = app.failure
        except Exception as error:  # noqa: BLE001 - told below, after the stage is at rest
            failure = error
        finally:
            watch.end()
            control.close(CLOSE_S)  # stops first whatever still moves
    if isinstance(failure, EvenarmError):
        raise failure
    if wanted:
        return wanted[0]
    if failure is not None or status is None:
        _tell(failure)
        return EXIT_FAULT
    return status


def _tell(failure: BaseException | None) -> None:
    """Say that the screen itself failed, where, and what has been done about the run."""
    lines = [
        "The screen failed and the run was stopped. This is a fault of Evenarm, not of the bench",
        "  mend: look where the stage stands, then start again; what was read is in the journal",
    ]
    if failure is not None:
        lines.insert(1, f"  why: {type(failure).__name__}: {printable(failure)}")
        trail = traceback.extract_tb(failure.__traceback__)[-3:]
        lines += [f"  in: {frame.filename}:{frame.lineno} {frame.name}" for frame in trail]
    sys.stderr.write("\n".join(lines) + "\n")
