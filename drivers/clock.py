"""Clocks: the wall's for real benches, one that jumps for simulated ones."""

from __future__ import annotations

import threading
import time

__all__ = ["RealClock", "VirtualClock"]


class RealClock:
    """Monotonic seconds of this computer."""

    def now_s(self) -> float:
        return time.monotonic()

    def sleep_s(self, duration_s: float) -> None:
        if duration_s > 0:
            time.sleep(duration_s)


class VirtualClock:
    """Bench time that passes only while somebody waits for it.

    ``pace`` is bench seconds for one second of the wall, at which sleeping really sleeps; None lets
    time jump. Safe to use from any thread: whoever asks in the middle of another's sleep sees how
    far it has come, and sleeps side by side pass side by side.
    """

    def __init__(self, pace: float | None = None, start_s: float = 0.0) -> None:
        if pace is not None and not pace > 0:
            raise ValueError(f"pace must be positive, not {pace}")
        self._pace = pace
        self._now_s = start_s
        self._lock = threading.Lock()
        # Running sleeps: the wall's and the bench's time at the beginning, the bench's at the end.
        self._sleeps: dict[object, tuple[float, float, float]] = {}

    def now_s(self) -> float:
        with self._lock:
            return self._reached_s()

    def sleep_s(self, duration_s: float) -> None:
        if not duration_s > 0:
            return
        if self._pace is None:
            with self._lock:
                self._now_s += duration_s
            return
        me = object()
        with self._lock:
            begun_s = self._reached_s()
            until_s = begun_s + duration_s
            self._sleeps[me] = (time.monotonic(), begun_s, until_s)
        try:
            time.sleep(duration_s / self._pace)
        finally:
            with self._lock:
                del self._sleeps[me]
                self._now_s = max(self._now_s, until_s)

    def _reached_s(self) -> float:
        """The bench's time now; the lock is held."""
        if self._sleeps and self._pace is not None:
            wall_s = time.monotonic()
            for wall_begun_s, begun_s, until_s in self._sleeps.values():
                reached_s = min(until_s, begun_s + self._pace * (wall_s - wall_begun_s))
                self._now_s = max(self._now_s, reached_s)
        return self._now_s
