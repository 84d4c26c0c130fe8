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
    time jump. Safe to read from any thread; only one thread at a time may sleep.
    """

    def __init__(self, pace: float | None = None, start_s: float = 0.0) -> None:
        if pace is not None and not pace > 0:
            raise ValueError(f"pace must be positive, not {pace}")
        self._pace = pace
        self._now_s = start_s
        self._lock = threading.Lock()

    def now_s(self) -> float:
        with self._lock:
            return self._now_s

    def sleep_s(self, duration_s: float) -> None:
        if not duration_s > 0:
            return
        if self._pace is not None:
            time.sleep(duration_s / self._pace)
        with self._lock:
            self._now_s += duration_s
