"""How a screw-driven axis moves: commanded path, play, and the errors between reading and mirror.

The path is a list of knots, each the start of a stretch of constant acceleration. Nothing here
runs: the position at any time is worked out when somebody asks for it.
"""

from __future__ import annotations

import math
from bisect import bisect_right
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["Mechanics", "Path"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Mechanics:
    """What stands between the reading of a stage and where its mirror is. Lengths in metres.

    ``zero_m`` is where the errors are anchored: the reading there is true for an increasing
    approach. ``reversal_m`` is the reading of one place approached increasing minus decreasing.
    ``ringing_m`` is the amplitude of the oscillation that follows an arrival and is over within
    ``settle_s``.
    """

    zero_m: float = 0.0
    reversal_m: float = 0.0
    periodic_m: float = 0.0
    period_m: float = 1e-3
    periodic_phase_rad: float = 0.0
    scale: float = 0.0
    ringing_m: float = 0.0
    settle_s: float = 0.0

    def errors_m(self, carriage_m: FloatArray) -> FloatArray:
        """Mirror minus carriage: scale error and periodic error, both nothing at the zero."""
        from_zero_m = carriage_m - self.zero_m
        error_m = self.scale * from_zero_m
        if self.periodic_m:
            angle = 2.0 * math.pi * from_zero_m / self.period_m + self.periodic_phase_rad
            error_m = error_m + self.periodic_m * (
                np.sin(angle) - math.sin(self.periodic_phase_rad)
            )
        return error_m

    def reading_m(self, mirror_m: float) -> float:
        """The reading at which the mirror is at ``mirror_m``, approached increasing."""
        reading_m = mirror_m
        for _ in range(60):  # contracts by the slope of the errors, far below one
            reading_m = mirror_m - float(self.errors_m(np.asarray(reading_m)))
        return reading_m


@dataclass(frozen=True)
class _Knot:
    """Start of a stretch: where, how fast, with what acceleration, and how far the play is taken
    up: 0 as after an increasing approach, 1 as after a decreasing one."""

    time_s: float
    position_m: float
    speed_m_s: float
    acceleration_m_s2: float
    play: float
    direction: int
    rings: bool = False


class Path:
    """The commanded positions of an axis over time, from rest at ``start_m`` at ``time_s``.

    Raises ValueError where a time lies before the last command: the past is not changed.
    """

    def __init__(self, start_m: float, time_s: float, mechanics: Mechanics) -> None:
        self.mechanics = mechanics
        self._knots = [_Knot(time_s, start_m, 0.0, 0.0, 0.0, 0)]
        self._times_s = [time_s]

    @property
    def rest_s(self) -> float:
        """When the last command has the axis at rest."""
        return self._times_s[-1]

    def go(self, target_m: float, speed_m_s: float, acceleration_m_s2: float, at_s: float) -> None:
        """From rest at ``at_s`` to rest at ``target_m``: a trapezoid of speed, or a triangle."""
        if at_s < self.rest_s:
            raise ValueError("the axis still moves")
        start_m = self._knots[-1].position_m
        distance_m = abs(target_m - start_m)
        if distance_m < 1e-15:  # below the rounding of any position: there already
            return
        sign = 1 if target_m > start_m else -1
        peak_m_s = min(speed_m_s, math.sqrt(distance_m * acceleration_m_s2))
        ramp_s = peak_m_s / acceleration_m_s2
        ramp_m = 0.5 * peak_m_s * ramp_s
        cruise_s = max(0.0, distance_m - 2.0 * ramp_m) / peak_m_s
        a = sign * acceleration_m_s2
        self._add(at_s, start_m, 0.0, a, sign)
        self._add(at_s + ramp_s, start_m + sign * ramp_m, sign * peak_m_s, 0.0, sign)
        brake_s = at_s + ramp_s + cruise_s
        self._add(brake_s, target_m - sign * ramp_m, sign * peak_m_s, -a, sign)
        self._add(brake_s + ramp_s, target_m, 0.0, 0.0, 0, rings=True)

    def halt(self, acceleration_m_s2: float, at_s: float, *, dead: bool = False) -> None:
        """Brake from ``at_s``; ``dead`` for an axis that does not turn and stops where it is."""
        if at_s >= self.rest_s:
            return
        position_m, speed_m_s = self._command(at_s)
        play = float(self._play(np.asarray([at_s]))[0])
        keep = bisect_right(self._times_s, at_s)
        sign = 1 if speed_m_s > 0 else -1 if speed_m_s < 0 else 0
        del self._knots[keep:], self._times_s[keep:]
        if dead or sign == 0:
            self._knots.append(_Knot(at_s, position_m, 0.0, 0.0, play, 0))
            self._times_s.append(at_s)
            return
        brake_s = abs(speed_m_s) / acceleration_m_s2
        self._knots.append(
            _Knot(at_s, position_m, speed_m_s, -sign * acceleration_m_s2, play, sign)
        )
        self._times_s.append(at_s)
        self._add(at_s + brake_s, position_m + 0.5 * speed_m_s * brake_s, 0.0, 0.0, 0, rings=True)

    def fastest_m_s(self, from_s: float, to_s: float) -> float:
        """No less than the highest speed of the mirror between two times."""
        first = max(0, bisect_right(self._times_s, from_s) - 1)
        last = bisect_right(self._times_s, to_s) + 1
        mechanics = self.mechanics
        fastest_m_s = max(abs(knot.speed_m_s) for knot in self._knots[first:last])
        wave = 2.0 * math.pi * abs(mechanics.periodic_m) / mechanics.period_m
        play = 2.0 if mechanics.reversal_m < 0.0 else 1.0  # then both move together
        fastest_m_s *= play * (1.0 + abs(mechanics.scale) + wave)
        if mechanics.ringing_m and any(knot.rings for knot in self._knots[first:last]):
            fastest_m_s += 8.0 * math.pi * mechanics.ringing_m / max(mechanics.settle_s, 1e-6)
        return fastest_m_s

    def command_m(self, time_s: float) -> float:
        """Where the axis is by its own encoder."""
        return self._command(time_s)[0]

    def mirror_m(self, time_s: FloatArray) -> FloatArray:
        """Where the mirror is, as the reading that would be true there; shape of ``time_s``."""
        flat = np.ravel(time_s)
        knots, index = self._stretches(flat)
        position_m, elapsed_s = self._along(knots, index, flat)
        carriage_m = position_m
        if self.mechanics.reversal_m:
            carriage_m = position_m + self.mechanics.reversal_m * self._play(flat)
        mirror_m = carriage_m + self.mechanics.errors_m(carriage_m)
        if self.mechanics.ringing_m and self.mechanics.settle_s > 0:
            rings = np.asarray([knot.rings for knot in knots])[index]
            share = elapsed_s / self.mechanics.settle_s
            rings &= share < 1.0
            ring_m = np.exp(-7.0 * share[rings]) * np.sin(6.0 * math.pi * share[rings])
            mirror_m[rings] += self.mechanics.ringing_m * ring_m
        return mirror_m.reshape(np.shape(time_s))

    # --- inside --------------------------------------------------------------------------------

    def _add(
        self,
        time_s: float,
        position_m: float,
        speed: float,
        a: float,
        sign: int,
        *,
        rings: bool = False,
    ) -> None:
        last = self._knots[-1]
        play = self._after(last.play, last.direction, position_m - last.position_m)
        self._knots.append(_Knot(time_s, position_m, speed, a, play, sign, rings))
        self._times_s.append(time_s)

    def _after(self, play: float, direction: int, moved_m: float) -> float:
        slack_m = abs(self.mechanics.reversal_m)
        if slack_m == 0.0:
            return 1.0 if direction < 0 else 0.0 if direction > 0 else play
        return min(1.0, max(0.0, play - moved_m / slack_m))

    def _command(self, time_s: float) -> tuple[float, float]:
        place = max(0, bisect_right(self._times_s, time_s) - 1)
        knot = self._knots[place]
        t = max(0.0, time_s - knot.time_s)
        a = knot.acceleration_m_s2
        position_m = knot.position_m + knot.speed_m_s * t + 0.5 * a * t * t
        return position_m, knot.speed_m_s + a * t

    def _stretches(self, time_s: FloatArray) -> tuple[list[_Knot], NDArray[np.intp]]:
        """The knots that matter for ``time_s`` and which of them each time belongs to."""
        first = max(0, bisect_right(self._times_s, float(time_s.min())) - 1)
        last = max(first + 1, bisect_right(self._times_s, float(time_s.max())))
        starts = np.asarray(self._times_s[first:last])
        index = np.maximum(np.searchsorted(starts, time_s, side="right") - 1, 0)
        return self._knots[first:last], index

    @staticmethod
    def _along(
        knots: list[_Knot], index: NDArray[np.intp], time_s: FloatArray
    ) -> tuple[FloatArray, FloatArray]:
        rows = np.asarray(
            [(k.time_s, k.position_m, k.speed_m_s, k.acceleration_m_s2) for k in knots]
        )
        start_s, position_m, speed, a = (rows[index, column] for column in range(4))
        t = np.maximum(time_s - start_s, 0.0)
        return position_m + speed * t + 0.5 * a * t * t, t

    def _play(self, time_s: FloatArray) -> FloatArray:
        knots, index = self._stretches(time_s)
        position_m, _ = self._along(knots, index, time_s)
        rows = np.asarray([(k.position_m, k.play) for k in knots])
        slack_m = abs(self.mechanics.reversal_m)
        if slack_m == 0.0:
            return np.asarray(rows[index, 1])
        moved_m = position_m - rows[index, 0]
        return np.asarray(np.clip(rows[index, 1] - moved_m / slack_m, 0.0, 1.0))
