"""Perform one scan: a sweep read while the stage moves, or steps read at rest.

Each reading is given the stage position that belongs to it: the read-backs on both sides of it,
taken at the bench times they carry, smoothed over a short stretch, shifted by the detector's lag.
"""

from __future__ import annotations

import contextlib
import math
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from bench.quantities import StagePosition
from bench.spec.model import BenchSpec
from drivers.contracts import Block, Detector, DeviceError, MotionFailed, StageState

from .devices import Devices
from .guard import Guard

__all__ = [
    "Readings",
    "ScanStopped",
    "perform_step_scan",
    "perform_sweep",
    "sleep_in_slices",
    "wait_for_rest",
]

FloatArray = NDArray[np.float64]

POLL_S = 0.02
BLOCK_S = 0.1
DETECTOR_TIMEOUT_S = 10.0


class ScanStopped(Exception):
    """A software stop came while something was being performed."""


@dataclass(frozen=True)
class Readings:
    """Columns of one scan, each of shape (n,): bench time, stage reading, signal, saturation."""

    time_s: FloatArray
    position_m: FloatArray
    signal: FloatArray
    saturated: FloatArray

    @property
    def columns(self) -> dict[str, FloatArray]:
        return {
            "time_s": self.time_s,
            "position_m": self.position_m,
            "signal": self.signal,
            "saturated": self.saturated,
        }

    @staticmethod
    def joined(parts: list[Readings]) -> Readings:
        if not parts:
            return Readings(*(np.empty(0) for _ in range(4)))
        return Readings(
            np.concatenate([p.time_s for p in parts]),
            np.concatenate([p.position_m for p in parts]),
            np.concatenate([p.signal for p in parts]),
            np.concatenate([p.saturated for p in parts]),
        )


Keep = Callable[[Readings], None]
Watch = Callable[[StageState], None]
MayGoOn = Callable[[], None]


def wait_for_rest(
    guard: Guard,
    devices: Devices,
    spec: BenchSpec,
    target_m: float | None,
    *,
    expected_s: float,
    watch: Watch,
    may_go_on: MayGoOn,
) -> StageState:
    """Until the stage has arrived and settled; ``target_m`` None where it homes.

    Raises MotionFailed, ScanStopped or DeviceError.
    """
    whither = "its origin" if target_m is None else f"{target_m * 1e3:.6f} mm"
    deadline_s = devices.clock.now_s() + 2.0 * expected_s + 5.0
    poll_s = min(max(expected_s / 50.0, 1e-3), 0.1)
    while True:
        may_go_on()
        guard.renew()
        state = guard.state()
        watch(state)
        if not state.moving:
            break
        if devices.clock.now_s() > deadline_s:
            raise MotionFailed(
                f"the stage did not arrive at {whither} in time; "
                f"it is at {state.position_m * 1e3:.6f} mm",
                device="stage",
                mend="look for an obstacle or a stalled drive, then home the stage",
            )
        devices.clock.sleep_s(poll_s)
    guard.rest()
    if guard.lapsed:
        raise MotionFailed(
            "the stage was stopped on its way because the program had fallen silent",
            device="stage",
            mend="look what keeps this computer busy, then run again",
        )
    sleep_in_slices(devices, spec.stage.settle_s, may_go_on)
    state = guard.state()
    watch(state)
    _check_arrival(state, target_m, spec)
    return state


def sleep_in_slices(devices: Devices, duration_s: float, may_go_on: MayGoOn) -> None:
    """Let bench time pass in slices, so that a stop is heard. Raises ScanStopped."""
    clock = devices.clock
    until_s = clock.now_s() + duration_s
    while (left_s := until_s - clock.now_s()) > 1e-9:
        may_go_on()
        clock.sleep_s(min(left_s, 0.1))


def _check_arrival(state: StageState, target_m: float | None, spec: BenchSpec) -> None:
    tolerance_m = max(20.0 * spec.stage.resolution_m, 1e-6)
    if not state.known:
        raise MotionFailed(
            "the stage lost its origin while it moved",
            device="stage",
            mend="check its power supply, then home it",
        )
    if target_m is not None and abs(state.position_m - target_m) > tolerance_m:
        raise MotionFailed(
            f"the stage came to rest at {state.position_m * 1e3:.6f} mm "
            f"instead of {target_m * 1e3:.6f} mm",
            device="stage",
            mend="look for an obstacle or a limit switch, then home the stage",
        )


@dataclass
class _Track:
    """Read-backs of a sweep, and the position at any time between them."""

    lag_s: float
    time_s: list[float] = field(default_factory=list)
    position_m: list[float] = field(default_factory=list)

    def add(self, state: StageState) -> None:
        if not self.time_s or state.time_s > self.time_s[-1]:
            self.time_s.append(state.time_s)
            self.position_m.append(state.position_m)

    def at(self, time_s: FloatArray) -> FloatArray:
        return np.interp(time_s - self.lag_s, self.time_s, self.position_m)


def smooth_track(time_s: FloatArray, position_m: FloatArray, half_window: int) -> FloatArray:
    """Read-backs freed of their rounding: a straight line through each one's neighbours.

    ``half_window`` neighbours on each side (fewer at the ends, symmetric about the point), which at
    constant speed lowers the rounding's error by the square root of their number.
    """
    count = time_s.size
    if count < 3 or half_window < 1:
        return position_m
    index = np.arange(count)
    reach = np.minimum(np.minimum(index, count - 1 - index), half_window)
    lo, hi = index - reach, index + reach + 1
    t = time_s - time_s.mean()
    x = position_m - position_m.mean()

    def window_sum(values: FloatArray) -> FloatArray:
        total = np.concatenate([[0.0], np.cumsum(values)])
        return np.asarray(total[hi] - total[lo], dtype=np.float64)

    n = (hi - lo).astype(np.float64)
    mt, mx = window_sum(t) / n, window_sum(x) / n
    stt = window_sum(t * t) / n - mt * mt
    stx = window_sum(t * x) / n - mt * mx
    slope = np.divide(stx, stt, out=np.zeros_like(stx), where=stt > 0)
    smooth = mx + slope * (t - mt) + position_m.mean()
    return np.where(reach > 0, smooth, position_m)


def perform_sweep(
    guard: Guard,
    devices: Devices,
    spec: BenchSpec,
    *,
    start_m: float,
    stop_m: float,
    end_m: float,
    speed_m_s: float,
    keep: Keep,
    watch: Watch,
    may_go_on: MayGoOn,
) -> tuple[Readings, StageState]:
    """Read the detector while the stage moves to ``end_m``; keep what lies between the two ends.

    ``keep`` gets every block as it comes (about ten a second) with interpolated positions, to be
    made durable. Returns all readings at constant speed within the range, with smoothed positions,
    and where the stage came to rest. Raises DeviceError or ScanStopped.
    """
    track = _Track(spec.detector.lag_s)
    blocks: list[Block] = []
    fresh: list[Block] = []
    clock, port = devices.clock, devices.detector
    before = guard.state()
    expected_s = abs(end_m - before.position_m) / speed_m_s
    deadline_s = clock.now_s() + 2.0 * expected_s + 5.0

    def take(detector: Detector) -> Block:
        return detector.take(POLL_S, timeout_s=DETECTOR_TIMEOUT_S)

    def hand_over() -> None:
        if fresh:
            block = _join(fresh)
            keep(_with_positions(block, track.at(block.time_s)))
            blocks.append(block)
            fresh.clear()

    port.call(lambda d: d.start_stream(timeout_s=DETECTOR_TIMEOUT_S), timeout_s=DETECTOR_TIMEOUT_S)
    try:
        guard.start_move(StagePosition(end_m), speed_m_s)
        state = guard.state()
        track.add(state)
        while state.moving:
            may_go_on()
            guard.renew()
            fresh.append(port.call(take, timeout_s=DETECTOR_TIMEOUT_S))
            state = guard.state()
            track.add(state)
            if sum(block.time_s.size for block in fresh) >= spec.detector.rate_hz * BLOCK_S:
                watch(state)
                hand_over()
            if clock.now_s() > deadline_s:
                raise MotionFailed(
                    "the sweep did not end in time",
                    device="stage",
                    mend="look for an obstacle or a stalled drive, then home the stage",
                )
        hand_over()
    except BaseException:
        # The axis first, whatever went wrong; and what went wrong is what is told.
        with contextlib.suppress(DeviceError):
            guard.stop()
        with contextlib.suppress(DeviceError):
            port.call(_end_stream, timeout_s=DETECTOR_TIMEOUT_S)
        raise
    port.call(_end_stream, timeout_s=DETECTOR_TIMEOUT_S)
    rest = wait_for_rest(
        guard, devices, spec, end_m, expected_s=1.0, watch=watch, may_go_on=may_go_on
    )
    whole = _join(blocks) if blocks else Block(np.empty(0), np.empty(0), np.empty(0, dtype=bool))
    return _steady_part(track, whole, start_m, stop_m, speed_m_s, spec), rest


def _end_stream(detector: Detector) -> None:
    detector.stop_stream(timeout_s=DETECTOR_TIMEOUT_S)


def _join(blocks: list[Block]) -> Block:
    return Block(
        np.concatenate([block.time_s for block in blocks]),
        np.concatenate([block.signal for block in blocks]),
        np.concatenate([block.saturated for block in blocks]),
    )


def _with_positions(block: Block, position_m: FloatArray) -> Readings:
    return Readings(block.time_s, position_m, block.signal, block.saturated.astype(np.float64))


def _steady_part(
    track: _Track, block: Block, start_m: float, stop_m: float, speed_m_s: float, spec: BenchSpec
) -> Readings:
    """The readings within the range, without the ramps at both ends of the move."""
    if len(track.time_s) < 2 or block.time_s.size == 0:
        return Readings(*(np.empty(0) for _ in range(4)))
    times = np.asarray(track.time_s)
    raw = np.asarray(track.position_m)
    lasting = np.diff(times)
    speeds = np.abs(np.diff(raw)) / lasting
    allowed = 0.02 * speed_m_s + 2.0 * spec.stage.resolution_m / lasting
    steady = np.abs(speeds - speed_m_s) <= allowed
    if not steady.any():
        raise MotionFailed(
            f"the stage never reached {speed_m_s * 1e6:g} um/s in the sweep",
            device="stage",
            mend="check [stage] speed and acceleration against the controller's own settings",
        )
    # Smooth the steady stretch alone: a line through a ramp would bend into it.
    first, last = int(np.argmax(steady)), int(steady.size - np.argmax(steady[::-1]))
    smooth = raw.copy()
    half_window = max(1, math.ceil(0.2 / POLL_S))
    smooth[first : last + 1] = smooth_track(
        times[first : last + 1], raw[first : last + 1], half_window
    )
    own_time = block.time_s - track.lag_s
    position_m = np.interp(own_time, times, smooth)
    low_m, high_m = min(start_m, stop_m), max(start_m, stop_m)
    inside = (own_time >= times[first]) & (own_time <= times[last])
    inside &= (position_m >= low_m) & (position_m <= high_m)
    return Readings(
        block.time_s[inside],
        position_m[inside],
        block.signal[inside],
        block.saturated[inside].astype(np.float64),
    )


def perform_step_scan(
    guard: Guard,
    devices: Devices,
    spec: BenchSpec,
    *,
    start_m: float,
    stop_m: float,
    increment_m: float,
    keep: Keep,
    watch: Watch,
    may_go_on: MayGoOn,
) -> tuple[Readings, StageState]:
    """Move, settle, read; again. Raises DeviceError or ScanStopped."""
    count = max(2, math.floor(abs(stop_m - start_m) / increment_m) + 1)
    sign = 1.0 if stop_m >= start_m else -1.0
    parts: list[Readings] = []
    state = guard.state()
    for index in range(count):
        target_m = start_m + sign * index * increment_m
        expected_s = abs(target_m - state.position_m) / spec.stage.speed_m_s
        guard.start_move(StagePosition(target_m), spec.stage.speed_m_s)
        state = wait_for_rest(
            guard, devices, spec, target_m, expected_s=expected_s, watch=watch, may_go_on=may_go_on
        )
        # A lagging detector still tells of the settling.
        sleep_in_slices(devices, spec.detector.lag_s, may_go_on)
        block = devices.detector.call(
            lambda d: d.read(1, timeout_s=DETECTOR_TIMEOUT_S), timeout_s=DETECTOR_TIMEOUT_S
        )
        part = _with_positions(block, np.full(block.time_s.size, state.position_m))
        keep(part)
        parts.append(part)
    return Readings.joined(parts), state
