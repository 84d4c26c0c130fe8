"""The guard: what it does not let through never reaches the driver."""

from __future__ import annotations

import dataclasses
import math
import threading

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from bench.errors import MotionRefused
from bench.procedure.guard import Guard, refusal
from bench.procedure.ports import Port
from bench.quantities import Opd, StageDisplacement, StagePosition
from bench.spec.model import StageSpec
from drivers.contracts import DeviceError, GarbledReply, Identity, NoReply, StageState

SPEC = StageSpec(
    driver="fake",
    travel_m=(0.0, 25e-3),
    speed_m_s=1e-3,
    acceleration_m_s2=1e-2,
    resolution_m=20e-9,
    settle_s=0.05,
    approach="increasing",
    reversal_allowance_m=20e-6,
    longest_move_m=5e-3,
)


class FakeStage:
    """Counts what reaches it."""

    def __init__(self, position_m: float = 10e-3, known: bool = True) -> None:
        self.position_m, self.known = position_m, known
        self.moves: list[tuple[float, float]] = []
        self.homes = self.stops = 0
        self.silent = False

    def identity(self, *, timeout_s: float) -> Identity:
        return Identity("a maker", "a stage", "1", simulated=True)

    def close(self) -> None:
        return

    def state(self, *, timeout_s: float) -> StageState:
        if self.silent:
            raise NoReply("silence", device="stage")
        return StageState(self.position_m, 0.0, False, self.known)

    def start_home(self, *, timeout_s: float) -> None:
        self.homes += 1

    def start_move(self, target_m: float, speed_m_s: float, *, timeout_s: float) -> None:
        self.moves.append((target_m, speed_m_s))
        self.position_m = target_m

    def stop(self, *, timeout_s: float) -> None:
        self.stops += 1


class Bench:
    """A guard around a fake stage, without its watching thread and with a clock in the hand."""

    def __init__(self, spec: StageSpec = SPEC, **stage: float) -> None:
        self.stage = FakeStage(**stage)  # type: ignore[arg-type]
        self.port: Port[FakeStage] = Port("stage", self.stage)
        self.wall_s = 0.0
        self.guard = Guard(self.port, spec, wall=lambda: self.wall_s, watch=False)  # type: ignore[arg-type]

    def close(self) -> None:
        self.guard.close()
        self.port.close()


@pytest.fixture
def bench():
    made = Bench()
    yield made
    made.close()


def test_a_good_move_reaches_the_stage(bench):
    bench.guard.arm()
    bench.guard.start_move(StagePosition(12e-3), 1e-3)
    assert bench.stage.moves == [(12e-3, 1e-3)]


def test_arming_tries_the_stop_and_the_read_back(bench):
    bench.guard.arm()
    assert bench.stage.stops == 1
    bench.stage.silent = True
    with pytest.raises(DeviceError):
        bench.guard.arm()


def test_nothing_moves_before_arming(bench):
    with pytest.raises(MotionRefused, match="not armed"):
        bench.guard.start_move(StagePosition(12e-3), 1e-3)
    with pytest.raises(MotionRefused, match="not armed"):
        bench.guard.start_home()
    assert bench.stage.moves == []
    assert bench.stage.homes == 0


def test_without_limits_arming_is_refused():
    made = Bench(dataclasses.replace(SPEC, travel_m=None))
    with pytest.raises(MotionRefused, match="without travel limits"):
        made.guard.arm()
    made.close()


@pytest.mark.parametrize(
    ("target", "speed_m_s", "says"),
    [
        (StagePosition(-1e-9), 1e-3, "outside the soft limits"),
        (StagePosition(25.000001e-3), 1e-3, "outside the soft limits"),
        (StagePosition(math.nan), 1e-3, "not a finite number"),
        (StagePosition(math.inf), 1e-3, "not a finite number"),
        (StagePosition(16e-3), 1e-3, "so much travel"),
        (StagePosition(12e-3), 0.0, "speed is not allowed"),
        (StagePosition(12e-3), 1.1e-3, "speed is not allowed"),
        (StagePosition(12e-3), math.nan, "speed is not allowed"),
        (StageDisplacement(12e-3), 1e-3, "not a stage position"),
        (Opd(12e-3), 1e-3, "not a stage position"),
        (12e-3, 1e-3, "not a stage position"),
    ],
)
def test_refusals_name_the_reason(bench, target, speed_m_s, says):
    bench.guard.arm()
    with pytest.raises(MotionRefused, match=says):
        bench.guard.start_move(target, speed_m_s)
    assert bench.stage.moves == []


def test_an_unknown_position_lets_only_homing_through(bench):
    bench.stage.known = False
    bench.guard.arm()
    with pytest.raises(MotionRefused, match="position is not known"):
        bench.guard.start_move(StagePosition(12e-3), 1e-3)
    bench.guard.start_home()
    assert (bench.stage.moves, bench.stage.homes) == ([], 1)


def test_no_live_read_back_no_motion(bench):
    bench.guard.arm()
    bench.stage.silent = True
    with pytest.raises(MotionRefused, match="no live read-back"):
        bench.guard.start_move(StagePosition(12e-3), 1e-3)
    assert bench.stage.moves == []


def test_after_a_stop_nothing_moves_until_armed_again(bench):
    bench.guard.arm()
    bench.guard.stop()
    bench.guard.stop()
    assert bench.stage.stops == 3
    with pytest.raises(MotionRefused, match="a stop was asked for"):
        bench.guard.start_move(StagePosition(12e-3), 1e-3)
    bench.guard.arm()
    bench.guard.start_move(StagePosition(12e-3), 1e-3)
    assert len(bench.stage.moves) == 1


def test_a_stop_that_comes_while_a_move_waits_in_the_queue_wins(bench):
    """The move is asked about again in the owner's thread, just before it reaches the device."""
    bench.guard.arm()
    asked = bench.stage.state

    def stopped_meanwhile(*, timeout_s: float) -> StageState:
        bench.guard._stopped = True
        return asked(timeout_s=timeout_s)

    bench.stage.state = stopped_meanwhile
    with pytest.raises(MotionRefused, match="a stop was asked for"):
        bench.guard.start_move(StagePosition(12e-3), 1e-3)
    assert bench.stage.moves == []


def test_a_lapsed_lease_stops_the_axis(bench):
    bench.guard.arm()
    bench.guard.start_move(StagePosition(12e-3), 1e-3)
    bench.wall_s = 2.9
    assert not bench.guard.check_lease()
    bench.guard.renew()
    bench.wall_s = 5.8
    assert not bench.guard.check_lease()
    bench.wall_s = 6.0
    before = bench.stage.stops
    assert bench.guard.check_lease()
    assert bench.stage.stops == before + 1
    with pytest.raises(MotionRefused, match="motion was stopped"):
        bench.guard.start_move(StagePosition(12.1e-3), 1e-3)


def test_the_watch_stops_an_axis_whose_program_fell_silent():
    stage, told = FakeStage(), threading.Event()
    port: Port[FakeStage] = Port("stage", stage)
    guard = Guard(port, SPEC, lease_s=0.02)  # type: ignore[arg-type]
    guard.arm()
    guard.start_move(StagePosition(12e-3), 1e-3)
    stop = stage.stop

    def stopped(*, timeout_s: float) -> None:
        stop(timeout_s=timeout_s)
        told.set()

    stage.stop = stopped  # type: ignore[method-assign]
    assert told.wait(10)
    assert guard.lapsed
    guard.close()
    port.close()


def test_a_stop_that_was_not_answered_stays_owed(bench):
    bench.guard.arm()
    bench.guard.start_move(StagePosition(12e-3), 1e-3)
    bench.wall_s = 10.0
    stop, bench.stage.stop = bench.stage.stop, garbled
    for _ in range(3):
        with pytest.raises(DeviceError):
            bench.guard.check_lease()
    bench.stage.stop = stop
    before = bench.stage.stops
    assert bench.guard.check_lease()
    assert bench.stage.stops == before + 1
    assert not bench.guard.check_lease()


def test_a_driver_that_breaks_in_its_own_way_is_a_device_error(bench):
    bench.guard.arm()
    bench.guard.start_move(StagePosition(12e-3), 1e-3)
    bench.wall_s = 10.0
    bench.stage.stop = broken
    with pytest.raises(DeviceError, match="OSError"):
        bench.guard.check_lease()


def test_a_move_that_overruns_its_deadline_is_stopped_when_it_begins_at_last(bench, monkeypatch):
    bench.guard.arm()
    bench.port.grace_s = 0.01
    go_on, begin = threading.Event(), bench.stage.start_move

    def late(target_m: float, speed_m_s: float, *, timeout_s: float) -> None:
        assert go_on.wait(10)
        begin(target_m, speed_m_s, timeout_s=timeout_s)

    bench.stage.start_move = late
    before = bench.stage.stops
    monkeypatch.setattr("bench.procedure.guard.CALL_TIMEOUT_S", 0.01)
    with pytest.raises(NoReply):
        bench.guard.start_move(StagePosition(12e-3), 1e-3)
    monkeypatch.undo()
    go_on.set()
    bench.port.grace_s = 5.0
    assert bench.guard.state().position_m == 12e-3  # it did begin ...
    assert bench.stage.stops == before + 1  # ... and the stop came right behind it


def garbled(*, timeout_s: float) -> None:
    raise GarbledReply("noise on the line", device="stage")


def broken(*, timeout_s: float) -> None:
    raise OSError("the port went away")


def test_a_stage_at_rest_needs_no_lease(bench):
    bench.guard.arm()
    bench.guard.start_move(StagePosition(12e-3), 1e-3)
    bench.guard.rest()
    bench.wall_s = 1e6
    assert not bench.guard.check_lease()


lengths = st.floats(allow_nan=True, allow_infinity=True) | st.floats(-0.05, 0.05)


@settings(max_examples=1500, deadline=None)
@given(
    travel=st.tuples(st.floats(-0.05, 0.05), st.floats(0.0, 0.05)) | st.none(),
    longest_m=st.floats(1e-6, 0.1),
    position_m=lengths,
    known=st.booleans(),
    target=lengths.map(StagePosition) | lengths.map(Opd) | lengths,
    speed_m_s=lengths,
    silent=st.booleans(),
)
def test_whatever_is_let_through_satisfies_every_rule(
    travel, longest_m, position_m, known, target, speed_m_s, silent
):
    """The rules said again, independently of the code that applies them."""
    limits = None if travel is None else (travel[0], travel[0] + travel[1])
    spec = dataclasses.replace(SPEC, travel_m=limits, longest_move_m=longest_m)
    state = None if silent else StageState(position_m, 0.0, False, known)
    if refusal(spec, state, target, speed_m_s) is None:
        assert limits is not None
        assert state is not None
        assert state.known
        assert type(target) is StagePosition
        assert limits[0] <= target.m <= limits[1]
        assert abs(target.m - position_m) <= longest_m + SPEC.resolution_m
        assert 0.0 < speed_m_s <= SPEC.speed_m_s * (1 + 1e-9)
