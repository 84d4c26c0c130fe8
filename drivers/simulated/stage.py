"""A simulated axis."""

from __future__ import annotations

import math

import numpy as np

from drivers.contracts import (
    DeviceRefused,
    Identity,
    LimitReached,
    NotConnected,
    NotHomed,
    StageState,
)
from drivers.simulated.world import World

__all__ = ["SimulatedStage"]


class SimulatedStage:
    """Moves the mirror of ``world``. Every question takes the world's ``stage.reply_time``.

    A move asked for while one goes on is refused: stop first. A target beyond a hard end is refused
    whole with LimitReached. The end of a move and its settling are for the caller to wait for.
    """

    def __init__(
        self, world: World, *, speed_m_s: float, acceleration_m_s2: float, resolution_m: float
    ) -> None:
        self._world = world
        self._speed_m_s = speed_m_s
        self._acceleration_m_s2 = acceleration_m_s2
        self._resolution_m = resolution_m
        self._reply_s = world.value("stage.reply_time")
        self._known = bool(world.value("stage.homed"))
        # Before homing the counter starts at nothing wherever the carriage stands.
        self._counter_from_m = 0.0 if self._known else world.path.command_m(0.0)
        self._homing = False
        self._open = True

    def identity(self, *, timeout_s: float) -> Identity:
        self._ask(timeout_s)
        return Identity("Evenarm", "simulated axis", "SIM-STAGE", simulated=True)

    def close(self) -> None:
        if self._open:
            self._halt()
        self._open = False

    def state(self, *, timeout_s: float) -> StageState:
        self._ask(timeout_s)
        with self._world.locked():
            now_s = self._world.time_s()
            motor_s = self._world.motor_s()
            self._end_homing()
            position_m = self._world.path.command_m(motor_s) - self._counter_from_m
            moving = motor_s < self._world.path.rest_s
        clock_s = float(self._world.clock_s(np.asarray(now_s)))
        return StageState(self._rounded(position_m), clock_s, moving, self._known)

    def start_home(self, *, timeout_s: float) -> None:
        self._ask(timeout_s)
        with self._world.locked():
            self._refuse_motion()
            self._known, self._homing = False, True
            self._world.path.go(
                self._world.origin_m,
                self._speed_m_s,
                self._acceleration_m_s2,
                self._world.motor_s(),
            )

    def start_move(self, target_m: float, speed_m_s: float, *, timeout_s: float) -> None:
        self._ask(timeout_s)
        if not (math.isfinite(target_m) and math.isfinite(speed_m_s)):
            raise DeviceRefused("a target and a speed must be finite", device="stage")
        if not 0.0 < speed_m_s <= self._speed_m_s * (1.0 + 1e-9):
            raise DeviceRefused(
                f"speed {speed_m_s:g} m/s is not between 0 and {self._speed_m_s:g} m/s",
                device="stage",
            )
        low_m, high_m = self._world.ends_m
        if not low_m <= target_m <= high_m:
            raise LimitReached(
                f"{1e3 * target_m:.6g} mm lies beyond the end of the axis, "
                f"{1e3 * low_m:.6g} to {1e3 * high_m:.6g} mm",
                device="stage",
                mend="give a target within the travel",
            )
        with self._world.locked():
            self._refuse_motion()
            self._end_homing()
            if not self._known:
                raise NotHomed(
                    "the axis does not know where it is", device="stage", mend="home it first"
                )
            target_m = min(max(self._rounded(target_m), low_m), high_m)
            self._world.path.go(target_m, speed_m_s, self._acceleration_m_s2, self._world.motor_s())

    def stop(self, *, timeout_s: float) -> None:
        self._ask(timeout_s)
        self._halt()

    def _end_homing(self) -> None:
        """Where the origin was reached, the counter is set there."""
        if self._homing and self._world.motor_s() >= self._world.path.rest_s:
            self._homing, self._known, self._counter_from_m = False, True, 0.0

    def _halt(self) -> None:
        with self._world.locked():
            self._end_homing()
            self._homing = False  # a homing cut short leaves the axis without an origin
            stalled = self._world.faults.active("stage stalled", self._world.time_s())
            self._world.path.halt(self._acceleration_m_s2, self._world.motor_s(), dead=stalled)

    def _ask(self, timeout_s: float) -> None:
        if not self._open:
            raise NotConnected("the stage was closed", device="stage", mend="open it again")
        self._world.reach("stage", timeout_s=timeout_s, takes_s=self._reply_s)

    def _refuse_motion(self) -> None:
        if self._world.motor_s() < self._world.path.rest_s:
            raise DeviceRefused(
                "the axis still moves", device="stage", mend="wait for it or stop it first"
            )

    def _rounded(self, position_m: float) -> float:
        if self._resolution_m <= 0.0:
            return position_m
        return round(position_m / self._resolution_m) * self._resolution_m
