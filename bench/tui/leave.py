"""Leaving in good order, whatever happens to the terminal: the stage first, then the screen.

Three things can go wrong with a screen: it is told to end (SIGTERM, SIGHUP, SIGINT), its terminal
goes away, or it hangs, for example because nobody reads what it writes. A thread of its own watches
for all three, because a hung screen can no longer do anything by itself. It asks for the software
stop at once, then for an orderly end of the screen, and only where that fails it puts the terminal
back by hand and ends the process.
"""

from __future__ import annotations

import contextlib
import os
import queue
import signal
import sys
import termios
import threading
import time
from collections.abc import Callable, Iterator
from types import FrameType
from typing import Any

from bench.tui.control import RunControl

__all__ = ["GRACE_S", "PATIENCE_S", "Watch", "watched_signals"]

PATIENCE_S = 10.0
"""Longest silence of a screen before the run is stopped: well above a slow console's redraw."""

GRACE_S = 5.0
"""Time for an orderly end of the screen and of the run before the process ends without it."""

_SIGNALS = (signal.SIGTERM, signal.SIGHUP, signal.SIGINT)

# Leave the alternate screen, show the cursor, plain attributes, wrapping on; paste brackets, focus
# reports and the extended keyboard off (xterm control sequences; the last one as kitty defines it).
_RESTORE = "\x1b[<u\x1b[?2004l\x1b[?1004l\x1b[?2048l\x1b[?1049l\x1b[0m\x1b[?7h\x1b[?25h\r\n"


class Watch(threading.Thread):
    """Stops the run when the screen is told to end or falls silent.

    ``ask_to_leave(status)`` must return at once and may be called before the screen is up.
    """

    def __init__(
        self,
        control: RunControl,
        ask_to_leave: Callable[[int], None],
        *,
        last_resort: Callable[[RunControl, int], None] | None = None,
        now_s: Callable[[], float] = time.monotonic,
        patience_s: float | None = None,
        grace_s: float | None = None,
    ) -> None:
        super().__init__(name="evenarm-watch", daemon=True)
        self._control = control
        self._ask_to_leave = ask_to_leave
        self._last_resort = last_resort or end_by_force
        self._now_s = now_s
        self._patience_s = PATIENCE_S if patience_s is None else patience_s
        self._grace_s = GRACE_S if grace_s is None else grace_s
        self._last_beat_s: float | None = None
        self._silent = False
        # SimpleQueue.put may be called from a signal handler.
        self._told: queue.SimpleQueue[int | None] = queue.SimpleQueue()
        self.signal: int | None = None

    def beat(self) -> None:
        """The screen is alive."""
        self._last_beat_s = self._now_s()

    def tell(self, number: int) -> None:
        """A signal came. Safe inside a signal handler."""
        self._told.put(number)

    def end(self) -> None:
        """The screen is gone in good order; let the thread end."""
        self._told.put(None)
        self.join(timeout=2 * self._grace_s)

    def check(self) -> None:
        """Stop the run if the screen has been silent for too long."""
        beat_s = self._last_beat_s
        silent = beat_s is not None and self._now_s() - beat_s > self._patience_s
        if silent and not self._silent and self._control.started and not self._control.finished:
            self._control.stop("the screen stopped responding")
        self._silent = silent

    def run(self) -> None:
        while True:
            try:
                number = self._told.get(timeout=0.25)
            except queue.Empty:
                self.check()
                continue
            if number is None:
                return
            self.signal = number
            self._control.stop(f"{signal.Signals(number).name} received")
            self._ask_to_leave(128 + number)
            try:
                while self._told.get(timeout=self._grace_s) is not None:
                    pass  # one signal is enough
            except queue.Empty:
                self._last_resort(self._control, 128 + number)
            return


def end_by_force(control: RunControl, status: int) -> None:
    """Put the terminal back by hand and end the process: the screen does not answer any more."""
    with contextlib.suppress(Exception):
        control.close(GRACE_S)
    with contextlib.suppress(OSError, ValueError, termios.error):
        descriptor = sys.__stderr__.fileno() if sys.__stderr__ is not None else 2
        os.set_blocking(descriptor, False)
        os.write(descriptor, _RESTORE.encode())
        os.set_blocking(descriptor, True)
    if _SAVED:
        with contextlib.suppress(OSError, termios.error):
            termios.tcsetattr(0, termios.TCSANOW, _SAVED[0])
    os._exit(status)


_SAVED: list[list[Any]] = []


@contextlib.contextmanager
def watched_signals(watch: Watch) -> Iterator[None]:
    """Hand signals to ``watch`` while the body runs, and put the old handlers back after it.

    Plain signal handlers rather than the event loop's: those would wait for a loop that may hang.
    """

    def tell(number: int, _: FrameType | None) -> None:
        watch.tell(number)

    with contextlib.suppress(OSError, termios.error):
        _SAVED[:] = [termios.tcgetattr(0)]
    before = {number: signal.signal(number, tell) for number in _SIGNALS}
    try:
        yield
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)
