"""The guard around every stage: what it does not let through never reaches the driver.

No limits, no known position or no live read-back means no motion. A target that is not a stage
position, not finite, outside the soft limits or further away than one command may ask for is
refused. Motion needs a lease that the conductor keeps renewing; one that lapses stops the axis.
After a stop the guard lets nothing through until it is armed again.

The guard is part of a program. It is no interlock and no emergency stop.
"""

from __future__ import annotations

import contextlib
import math
import threading
import time
from collections.abc import Callable

from bench.errors import MotionRefused
from bench.quantities import StagePosition
from bench.spec.model import StageSpec
from drivers.contracts import DeviceError, Stage, StageState

from .ports import Port

__all__ = ["Guard", "Refusal", "refusal"]

# One call in progress is what a stop may have to wait for, so read-backs get little time.
STATE_TIMEOUT_S = 0.5
CALL_TIMEOUT_S = 2.0

Refusal = tuple[str, str, str]  # what, why, mend


def refusal(
    spec: StageSpec, state: StageState | None, target: object, speed_m_s: float
) -> Refusal | None:
    """Why a command must not reach the stage, or None if it may. Pure.

    ``state`` is the newest read-back, None where there is none.
    """
    if spec.travel_m is None:
        return ("no motion without travel limits", "bench.toml gives none", "set [stage] travel")
    if not isinstance(target, StagePosition):
        kind = type(target).__name__
        return ("the target is not a stage position", f"it is {kind}", "convert it explicitly")
    if state is None:
        return ("no live read-back of the stage", "it did not answer", "check cable and power")
    if not state.known or not math.isfinite(state.position_m):
        return ("the stage position is not known", "it was not homed since", "home the stage")
    if not math.isfinite(target.m):
        return ("the target is not a finite number", f"it is {target.m}", "report this fault")
    low_m, high_m = spec.travel_m
    if not low_m <= target.m <= high_m:
        return (
            "the target is outside the soft limits",
            f"{target.m * 1e3:.6f} mm is not within {low_m * 1e3:g} to {high_m * 1e3:g} mm",
            "narrow the search, or correct [stage] travel if the limits are wrong",
        )
    distance_m = abs(target.m - state.position_m)
    if distance_m > spec.longest_move_m + spec.resolution_m:
        return (
            "one command may not ask for so much travel",
            f"{distance_m * 1e3:.6f} mm is more than {spec.longest_move_m * 1e3:g} mm",
            "move in several steps",
        )
    if not (math.isfinite(speed_m_s) and 0.0 < speed_m_s <= spec.speed_m_s * (1 + 1e-9)):
        return (
            "the speed is not allowed",
            f"{speed_m_s} m/s is not above 0 and up to {spec.speed_m_s:g} m/s",
            "choose a slower sweep, or correct [stage] speed",
        )
    return None


class Guard:
    """The only way to a stage. Thread-safe; ``stop`` may be called from anywhere at any time."""

    def __init__(
        self,
        port: Port[Stage],
        spec: StageSpec,
        *,
        lease_s: float = 3.0,
        wall: Callable[[], float] = time.monotonic,
        watch: bool = True,
    ) -> None:
        self._port = port
        self._spec = spec
        self._lease_s = lease_s
        self._wall = wall
        self._lock = threading.Lock()
        self._armed = False
        self._stopped = False
        self._lease_until: float | None = None
        self._ended = threading.Event()
        self.lapsed = False
        self._stop_owed = False
        self._watch: threading.Thread | None = None
        if watch:
            self._watch = threading.Thread(target=self._watch_lease, name="lease", daemon=True)
            self._watch.start()

    # --- asking ---------------------------------------------------------------------------------

    def state(self) -> StageState:
        """Live read-back. Raises DeviceError."""
        return self._port.call(
            lambda s: s.state(timeout_s=STATE_TIMEOUT_S), timeout_s=STATE_TIMEOUT_S
        )

    # --- arming ---------------------------------------------------------------------------------

    def arm(self) -> StageState:
        """Make motion possible: limits given, read-back alive, and the stop answers.

        Raises MotionRefused or DeviceError. The position may still be unknown: then only
        ``start_home`` is let through.
        """
        if self._spec.travel_m is None:
            raise self._error(("no motion without travel limits", "", "set [stage] travel"))
        self._stop_device()
        state = self.state()
        with self._lock:
            self._armed, self._stopped, self.lapsed = True, False, False
        return state

    def start_home(self) -> None:
        """Let the stage begin to find its origin. Raises MotionRefused or DeviceError."""
        self._must_be_armed()
        self.renew()

        def begin(stage: Stage) -> None:
            self._must_be_armed()
            stage.start_home(timeout_s=CALL_TIMEOUT_S)

        self._begin(begin)

    # --- moving ---------------------------------------------------------------------------------

    def start_move(self, target: StagePosition, speed_m_s: float) -> None:
        """Let a move begin if nothing speaks against it. Raises MotionRefused or DeviceError."""
        self._must_be_armed()
        try:
            state: StageState | None = self.state()
        except DeviceError:
            state = None
        against = refusal(self._spec, state, target, speed_m_s)
        if against is not None:
            raise self._error(against)
        self.renew()

        def begin(stage: Stage) -> None:
            # Asked again in the owner's thread: a stop may have come while this call waited.
            self._must_be_armed()
            stage.start_move(target.m, speed_m_s, timeout_s=CALL_TIMEOUT_S)

        self._begin(begin)

    def renew(self) -> None:
        """Keep the motion allowed for another lease."""
        with self._lock:
            self._lease_until = self._wall() + self._lease_s

    def rest(self) -> None:
        """The stage is at rest: no lease is needed any more."""
        with self._lock:
            self._lease_until = None

    def stop(self) -> None:
        """Stop the axis now and let nothing more through. Idempotent. Raises DeviceError."""
        with self._lock:
            self._stopped = True
            self._lease_until = None
        self._stop_device()

    def close(self) -> None:
        """End the watch over the lease. Does not touch the stage."""
        self._ended.set()
        if self._watch is not None:
            self._watch.join(timeout=2.0)

    # --- inside ---------------------------------------------------------------------------------

    def _begin(self, begin: Callable[[Stage], None]) -> None:
        try:
            self._port.call(begin, timeout_s=CALL_TIMEOUT_S)
        except DeviceError:
            # The command may have gone out, or may still go out of a driver that takes its time.
            self._port.post_urgent(lambda s: s.stop(timeout_s=CALL_TIMEOUT_S))
            raise

    def _must_be_armed(self) -> None:
        with self._lock:
            armed, stopped, lapsed = self._armed, self._stopped, self.lapsed
        if lapsed:
            raise self._error(
                ("motion was stopped", "the program fell silent while the stage moved", "arm again")
            )
        if stopped:
            raise self._error(("motion was stopped", "a stop was asked for", "start again"))
        if not armed:
            raise self._error(("the stage is not armed", "", "arm it first"))

    def _stop_device(self) -> None:
        self._port.urgent(lambda s: s.stop(timeout_s=CALL_TIMEOUT_S), timeout_s=CALL_TIMEOUT_S)

    @staticmethod
    def _error(against: Refusal) -> MotionRefused:
        what, why, mend = against
        return MotionRefused(what, where="stage", why=why, mend=mend)

    def check_lease(self) -> bool:
        """Stop the axis if the lease has lapsed, until a stop was answered; whether it had.

        Raises DeviceError where this attempt was not answered: call again.
        """
        with self._lock:
            if self._lease_until is not None and self._wall() > self._lease_until:
                self.lapsed = self._stop_owed = True
                self._lease_until = None
            owed = self._stop_owed
        if owed:
            self._stop_device()
            with self._lock:
                self._stop_owed = False
        return owed

    def _watch_lease(self) -> None:
        while not self._ended.wait(self._lease_s / 10):
            # A stop that was not answered is owed still, and asked for again at the next turn.
            with contextlib.suppress(DeviceError):
                self.check_lease()
