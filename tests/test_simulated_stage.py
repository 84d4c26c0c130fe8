"""The simulated axis: kinematics, play and errors, ends, and what it refuses."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from drivers.clock import VirtualClock
from drivers.contracts import (
    Context,
    DeviceRefused,
    LimitReached,
    NoReply,
    NotConnected,
    NotHomed,
)
from drivers.simulated.example import example_bench, example_context
from drivers.simulated.motion import Mechanics, Path
from drivers.simulated.plugin import STAGE
from drivers.simulated.stage import SimulatedStage
from drivers.simulated.world import World

ZERO_M = 13.2184e-3


def opened(world: dict[str, Any] | None = None, **changes: Any) -> tuple[SimulatedStage, Context]:
    context = example_context(example_bench(world, **changes))
    stage = STAGE.open({}, context)
    assert isinstance(stage, SimulatedStage)
    return stage, context


def arrive(stage: SimulatedStage, context: Context, target_m: float, speed: float = 1e-3) -> None:
    stage.start_move(target_m, speed, timeout_s=1.0)
    while stage.state(timeout_s=1.0).moving:
        context.clock.sleep_s(0.005)


# Uniformly accelerated motion (common practice, no source): a trapezoid takes d/v + v/a,
# a triangle 2 sqrt(d/a).
@pytest.mark.parametrize(
    ("distance_m", "duration_s"),
    [(1e-3, 1.0 + 0.1), (-1e-3, 1.1), (4e-6, 2.0 * math.sqrt(4e-6 / 1e-2)), (1e-4, 0.2)],
)
def test_moves_take_as_long_as_they_must(distance_m: float, duration_s: float) -> None:
    path = Path(5e-3, 3.0, Mechanics())
    path.go(5e-3 + distance_m, 1e-3, 1e-2, 3.0)
    assert path.rest_s - 3.0 == pytest.approx(duration_s, rel=1e-9)
    assert path.command_m(path.rest_s + 9.0) == 5e-3 + distance_m
    assert path.command_m(3.0 + 0.5 * duration_s) == pytest.approx(5e-3 + 0.5 * distance_m)


@pytest.mark.parametrize("distance_m", [0.0, 5e-324, 1e-16])
def test_a_move_to_where_it_is_takes_no_time(distance_m: float) -> None:
    path = Path(0.0, 3.0, Mechanics())
    path.go(distance_m, 1e-3, 1e-2, 3.0)
    assert path.rest_s == 3.0


def test_speed_and_acceleration_stay_within_what_was_asked() -> None:
    path = Path(0.0, 0.0, Mechanics())
    path.go(2e-3, 0.7e-3, 1e-2, 0.0)
    time_s = np.linspace(0.0, path.rest_s + 0.1, 20001)
    speed = np.gradient(path.mirror_m(time_s), time_s)
    assert speed.max() == pytest.approx(0.7e-3, rel=1e-6)
    assert speed.min() >= -1e-12
    assert np.abs(np.gradient(speed, time_s)).max() < 1.01e-2


def test_a_stop_brakes_and_stays() -> None:
    stage, context = opened()
    stage.start_move(12e-3, 1e-3, timeout_s=1.0)
    context.clock.sleep_s(1.0)
    stage.stop(timeout_s=1.0)
    stage.stop(timeout_s=1.0)
    context.clock.sleep_s(0.2)
    state = stage.state(timeout_s=1.0)
    assert not state.moving
    # 7.5 mm at the start, half of 0.1 s lost in speeding up, v^2 / 2a of way to brake.
    assert state.position_m == pytest.approx(7.5e-3 + 1e-3 * 0.951 + 0.05e-3, abs=3e-6)
    context.clock.sleep_s(5.0)
    assert stage.state(timeout_s=1.0).position_m == state.position_m
    arrive(stage, context, 9e-3)
    assert stage.state(timeout_s=1.0).position_m == pytest.approx(9e-3, abs=1e-12)


def zero_reading(stage: SimulatedStage, context: Context, from_m: float, to_m: float) -> float:
    """Reading at which the mirror passes the zero, from a slow pass."""
    world = World.of(context)
    arrive(stage, context, from_m)
    begun_s = world.time_s()
    arrive(stage, context, to_m, 50e-6)
    time_s = np.linspace(begun_s + 0.1, world.time_s() - 0.1, 40001)
    reading_m = np.asarray([world.path.command_m(float(t)) for t in time_s[:: len(time_s) - 1]])
    mirror_m = world.mirror_m(time_s)
    crossed = np.flatnonzero(np.diff(np.sign(mirror_m - world.truth.zero_m)))
    assert crossed.size == 1
    return float(np.interp(crossed[0] + 0.5, [0, len(time_s) - 1], reading_m))


@pytest.mark.parametrize("reversal_m", [8e-6, -5e-6, 0.0])
def test_reversal_error_is_reading_increasing_minus_decreasing(reversal_m: float) -> None:
    stage, context = opened(
        {
            "stage.reversal_error": reversal_m,
            "stage.periodic_error.amplitude": 0.2e-6,
            "stage.scale_error": 1e-4,
        }
    )
    span_m = 60e-6
    rising = zero_reading(stage, context, ZERO_M - span_m, ZERO_M + span_m)
    falling = zero_reading(stage, context, ZERO_M + span_m, ZERO_M - span_m)
    assert rising == pytest.approx(ZERO_M, abs=1e-8)
    assert rising - falling == pytest.approx(reversal_m, abs=2e-8)
    again = zero_reading(stage, context, ZERO_M - span_m, ZERO_M + span_m)
    assert again == pytest.approx(ZERO_M, abs=1e-8)


@given(st.lists(st.floats(-40e-6, 40e-6), min_size=1, max_size=12), st.sampled_from([8e-6, -8e-6]))
@settings(max_examples=60, deadline=None)
def test_play_never_jumps_and_never_exceeds_itself(moves_m: list[float], play_m: float) -> None:
    path = Path(0.0, 0.0, Mechanics(zero_m=0.0, reversal_m=play_m))
    now_s = 0.0
    for target_m in moves_m:
        path.go(target_m, 1e-4, 1e-2, now_s)
        now_s = path.rest_s + 0.01
    time_s = np.linspace(0.0, now_s, 6001)
    mirror_m = path.mirror_m(time_s)
    command_m = np.asarray([path.command_m(float(t)) for t in time_s])
    offset_m = (mirror_m - command_m) / play_m
    assert offset_m.min() >= -1e-9
    assert offset_m.max() <= 1.0 + 1e-9
    fastest_m_s = path.fastest_m_s(0.0, now_s)
    steps_m = np.abs(np.diff(mirror_m))
    assert steps_m.max() <= fastest_m_s * (time_s[1] - time_s[0]) + 1e-12


def test_periodic_and_scale_error_leave_the_zero_alone() -> None:
    amplitude_m, period_m, scale = 0.2e-6, 1e-3, 1e-4
    mechanics = Mechanics(
        zero_m=ZERO_M,
        periodic_m=amplitude_m,
        period_m=period_m,
        periodic_phase_rad=2.0,
        scale=scale,
    )
    from_zero_m = np.arange(-10, 11) * period_m
    # Whole periods from the zero only the scale error is left.
    np.testing.assert_allclose(
        mechanics.errors_m(ZERO_M + from_zero_m), scale * from_zero_m, atol=1e-12
    )
    fine_m = ZERO_M + np.linspace(0.0, period_m, 4001)
    error_m = mechanics.errors_m(fine_m) - scale * (fine_m - ZERO_M)
    assert np.ptp(error_m) == pytest.approx(2.0 * amplitude_m, rel=1e-5)
    assert mechanics.reading_m(ZERO_M) == ZERO_M
    for mirror_m in (1e-3, 12.3456e-3, 20e-3):
        reading_m = np.asarray(mechanics.reading_m(mirror_m))
        assert float(reading_m + mechanics.errors_m(reading_m)) == pytest.approx(
            mirror_m, abs=1e-15
        )


def test_ringing_is_over_within_the_settle_time() -> None:
    path = Path(0.0, 0.0, Mechanics(ringing_m=1e-7, settle_s=0.05))
    path.go(1e-4, 1e-3, 1e-2, 0.0)
    after_s = path.rest_s + np.linspace(0.0, 0.2, 2001)
    ring_m = path.mirror_m(after_s) - 1e-4
    assert 2e-8 < np.abs(ring_m[after_s < path.rest_s + 0.05]).max() < 1e-7
    assert np.abs(ring_m[after_s >= path.rest_s + 0.045]).max() < 1e-9


def test_reading_back_is_rounded_to_the_resolution() -> None:
    stage, context = opened(stage={"resolution_m": 1e-6})
    arrive(stage, context, 8.0004e-3)
    assert stage.state(timeout_s=1.0).position_m == pytest.approx(8.0e-3, abs=1e-15)
    assert World.of(context).path.command_m(1e9) == pytest.approx(8.0e-3, abs=1e-15)


def move(target_m: float, speed_m_s: float = 1e-3) -> Callable[[SimulatedStage], None]:
    return lambda stage: stage.start_move(target_m, speed_m_s, timeout_s=1.0)


@pytest.mark.parametrize(
    ("command", "error"),
    [
        (move(25.6e-3), LimitReached),
        (move(-0.6e-3), LimitReached),
        (move(math.nan), DeviceRefused),
        (move(math.inf), DeviceRefused),
        (move(9e-3, 0.0), DeviceRefused),
        (move(9e-3, -1e-3), DeviceRefused),
        (move(9e-3, 1.1e-3), DeviceRefused),
        (move(9e-3, math.nan), DeviceRefused),
    ],
)
def test_what_cannot_be_is_refused_and_moves_nothing(
    command: Callable[[SimulatedStage], None], error: type[Exception]
) -> None:
    stage, context = opened()
    with pytest.raises(error):
        command(stage)
    context.clock.sleep_s(3.0)
    assert stage.state(timeout_s=1.0).position_m == pytest.approx(7.5e-3, abs=1e-12)


def test_a_move_within_a_move_is_refused() -> None:
    stage, _ = opened()
    stage.start_move(9e-3, 1e-3, timeout_s=1.0)
    with pytest.raises(DeviceRefused, match="still moves"):
        stage.start_move(8e-3, 1e-3, timeout_s=1.0)
    with pytest.raises(DeviceRefused, match="still moves"):
        stage.start_home(timeout_s=1.0)


def test_homing_tells_where_the_stage_is() -> None:
    stage, context = opened({"stage.homed": False, "stage.start": 3e-3})
    assert not stage.state(timeout_s=1.0).known
    with pytest.raises(NotHomed):
        stage.start_move(5e-3, 1e-3, timeout_s=1.0)
    stage.start_home(timeout_s=1.0)
    context.clock.sleep_s(0.5)
    assert stage.state(timeout_s=1.0).moving
    stage.stop(timeout_s=1.0)
    context.clock.sleep_s(1.0)
    state = stage.state(timeout_s=1.0)
    assert not state.known
    assert not state.moving
    with pytest.raises(NotHomed):
        stage.start_move(5e-3, 1e-3, timeout_s=1.0)
    stage.start_home(timeout_s=1.0)
    assert not stage.state(timeout_s=1.0).known
    context.clock.sleep_s(4.0)
    state = stage.state(timeout_s=1.0)
    assert state.known
    assert not state.moving
    assert state.position_m == 0.0
    arrive(stage, context, 5e-3)
    assert float(World.of(context).mirror_m(np.asarray([1e6]))[0]) == pytest.approx(5e-3, abs=1e-12)


def test_a_short_deadline_is_kept() -> None:
    stage, context = opened({"stage.reply_time": 0.2})
    before_s = context.clock.now_s()
    with pytest.raises(NoReply):
        stage.state(timeout_s=0.1)
    assert context.clock.now_s() - before_s == pytest.approx(0.1)


def test_closing_leaves_nothing_moving() -> None:
    stage, context = opened()
    stage.start_move(12e-3, 1e-3, timeout_s=1.0)
    context.clock.sleep_s(1.0)
    stage.close()
    stage.close()
    world = World.of(context)
    context.clock.sleep_s(0.5)
    first_m, later_m = world.mirror_m(np.asarray([world.time_s(), world.time_s() + 9.0]))
    assert first_m == later_m
    assert first_m < 9e-3
    with pytest.raises(NotConnected):
        stage.state(timeout_s=1.0)


COMMANDS = st.one_of(
    st.tuples(st.just("move"), st.floats(-5e-3, 30e-3), st.floats(1e-6, 1.2e-3)),
    st.tuples(st.just("stop"), st.just(0.0), st.just(0.0)),
    st.tuples(st.just("home"), st.just(0.0), st.just(0.0)),
    st.tuples(st.just("wait"), st.floats(0.0, 8.0), st.just(0.0)),
    st.tuples(st.just("state"), st.just(0.0), st.just(0.0)),
)


@given(
    st.lists(COMMANDS, max_size=25),
    st.booleans(),
    st.sampled_from([0.0, 8e-6, -8e-6]),
    st.lists(st.tuples(st.floats(0.0, 30.0), st.floats(0.0, 5.0)), max_size=2),
)
@settings(max_examples=150, deadline=None)
def test_no_sequence_of_commands_leaves_the_axis(
    commands: list[tuple[str, float, float]],
    homed: bool,
    play_m: float,
    stalls: list[tuple[float, float]],
) -> None:
    faults = [{"kind": "stage stalled", "at": at, "lasts": lasts} for at, lasts in stalls]
    stage, context = opened({"stage.homed": homed, "stage.reversal_error": play_m, "fault": faults})
    world = World.of(context)
    low_m, high_m = world.ends_m
    slack_m = 10e-6  # play and ringing belong to the mirror, not to the end switch
    last_s = context.clock.now_s()
    for word, first, second in commands:
        try:
            if word == "move":
                stage.start_move(first, second, timeout_s=1.0)
            elif word == "stop":
                stage.stop(timeout_s=1.0)
            elif word == "home":
                stage.start_home(timeout_s=1.0)
            elif word == "wait":
                context.clock.sleep_s(first)
        except (DeviceRefused, NotHomed):
            pass
        state = stage.state(timeout_s=1.0)
        assert last_s <= state.time_s <= context.clock.now_s()
        last_s = state.time_s
    times_s = np.linspace(0.0, world.time_s() + 60.0, 3001)
    mirror_m = world.mirror_m(times_s)
    assert mirror_m.min() >= low_m - slack_m
    assert mirror_m.max() <= high_m + slack_m
    assert np.abs(np.diff(mirror_m)).max() <= 2.01e-3 * (times_s[1] - times_s[0]) + 1e-6


def test_a_stalled_stage_says_that_it_moves_and_does_not() -> None:
    stage, context = opened({"fault": [{"kind": "stage stalled", "at": 1.0, "lasts": 10.0}]})
    stage.start_move(9e-3, 1e-3, timeout_s=1.0)
    context.clock.sleep_s(1.5)
    held = stage.state(timeout_s=1.0)
    context.clock.sleep_s(5.0)
    still = stage.state(timeout_s=1.0)
    assert held.moving
    assert still.moving
    assert held.position_m == still.position_m < 8.5e-3
    stage.stop(timeout_s=1.0)
    state = stage.state(timeout_s=1.0)
    assert not state.moving
    assert state.position_m == held.position_m
    context.clock.sleep_s(10.0)
    arrive(stage, context, 9e-3)
    assert stage.state(timeout_s=1.0).position_m == pytest.approx(9e-3, abs=1e-12)


def test_a_stall_that_ends_lets_the_move_go_on() -> None:
    stage, context = opened({"fault": [{"kind": "stage stalled", "at": 0.5, "lasts": 2.0}]})
    stage.start_move(8.5e-3, 1e-3, timeout_s=1.0)
    context.clock.sleep_s(1.1 + 2.0 - 0.01)
    assert stage.state(timeout_s=1.0).moving
    context.clock.sleep_s(0.02)
    state = stage.state(timeout_s=1.0)
    assert not state.moving
    assert state.position_m == pytest.approx(8.5e-3, abs=1e-12)


@pytest.mark.parametrize("device", ["stage", None])
def test_an_unplugged_stage_is_not_there_until_it_is_back(device: str | None) -> None:
    fault: dict[str, Any] = {"kind": "unplugged", "at": 1.0, "lasts": 2.0}
    if device:
        fault["device"] = device
    stage, context = opened({"fault": [fault]})
    stage.state(timeout_s=1.0)
    context.clock.sleep_s(1.5)
    for call in (stage.state, stage.stop, stage.identity, stage.start_home):
        with pytest.raises(NotConnected):
            call(timeout_s=1.0)
    context.clock.sleep_s(2.0)
    stage.state(timeout_s=1.0)


def test_paced_time_shows_what_has_passed_of_a_sleep(monkeypatch: pytest.MonkeyPatch) -> None:
    clock = VirtualClock(pace=100.0, start_s=5.0)
    wall_s = [10.0]
    seen: list[float] = []

    def sleep(duration_s: float) -> None:
        assert duration_s == pytest.approx(0.02)
        for _ in range(4):
            wall_s[0] += 0.5 * duration_s
            seen.append(clock.now_s())

    monkeypatch.setattr("drivers.clock.time.monotonic", lambda: wall_s[0])
    monkeypatch.setattr("drivers.clock.time.sleep", sleep)
    clock.sleep_s(2.0)
    assert seen == pytest.approx([6.0, 7.0, 7.0, 7.0])
    assert clock.now_s() == 7.0
    clock.sleep_s(-1.0)
    clock.sleep_s(math.nan)
    assert clock.now_s() == 7.0
