"""Performs what a run decides, and feeds back what happened. Every word of both is in the journal.

The order is always the same: an intent is durable before anything is sent, its outcome after. The
conductor lives in a thread of its own and knows no screen; screens read the board.
"""

from __future__ import annotations

import contextlib
import threading
from collections.abc import Callable, Mapping
from typing import TYPE_CHECKING, Any

from bench.errors import EvenarmError, JournalError, MotionRefused
from bench.journal import finite
from bench.quantities import StagePosition
from bench.spec.model import BenchSpec
from drivers.contracts import DeviceError, ReadingInvalid, StageState

from . import inputs as said
from .board import Board
from .decide import decide
from .devices import Devices
from .guard import Guard
from .locating import findings, locate_readings
from .scanning import (
    Readings,
    ScanStopped,
    perform_step_scan,
    perform_sweep,
    sleep_in_slices,
    wait_for_rest,
)
from .state import Pending, RunState, Setup, evolve

if TYPE_CHECKING:  # the class brings the database library, which the first screen need not wait for
    from bench.journal import Journal

__all__ = ["Conductor"]

CHANGE_TIMEOUT_S = 120.0
REST_TIMEOUT_S = 10.0


class Conductor:
    """One run on one bench. ``run`` blocks; ``answer`` and ``stop`` come from other threads."""

    def __init__(
        self,
        setup: Setup,
        spec: BenchSpec,
        devices: Devices,
        guard: Guard,
        journal: Journal,
        board: Board,
    ) -> None:
        self.setup = setup
        self.state = RunState()
        self._spec = spec
        self._devices = devices
        self._guard = guard
        self._journal = journal
        self._board = board
        self._sources = {source.name: source for source in spec.sources}
        self._readings: Readings | None = None
        self._said = threading.Condition()
        self._asking: str | None = None
        self._answer: tuple[bool, str] | None = None
        self._stop: tuple[str, str] | None = None
        self._stop_noted = False
        self.at_rest = True

    # --- from other threads ---------------------------------------------------------------------

    def answer(self, question_id: str, accepted: bool, by: str) -> None:
        """Answer the open question; an answer to any other is ignored."""
        with self._said:
            if question_id == self._asking and self._answer is None:
                self._answer = (accepted, by)
                self._said.notify_all()

    def stop(self, by: str, reason: str) -> None:
        """Software stop. The axis is told from a thread of its own, ahead of everything queued."""
        with self._said:
            self._stop = self._stop or (by, reason)
            self._said.notify_all()
        # Every press sends one: the first may have been lost on its way.
        threading.Thread(target=self._stop_axis, name="software-stop", daemon=True).start()

    def _stop_axis(self) -> None:
        # The run's own thread asks again while it brings everything to rest, and reports.
        with contextlib.suppress(DeviceError):
            self._guard.stop()

    # --- the run --------------------------------------------------------------------------------

    def run(self, started: Mapping[str, Any], interrupted: str) -> RunState:
        """From the first entry to the last. Raises EvenarmError only where nothing can be written.

        ``started`` is the body of the run's first entry; ``interrupted`` tells of an earlier run
        whose motion has no outcome in the journal, and makes this one ask before it moves.
        """
        try:
            self._begin(started, interrupted)
            while self.state.phase != "ended":
                self._feed(self._next())
        except JournalError:
            self.at_rest = self._at_rest() is not None
            raise
        except BaseException as error:
            # What is not foreseen is written down and told; the stage comes to rest before either.
            failed = self._fail(f"the program failed: {type(error).__name__}: {error}", "program")
            self.at_rest = failed.at_rest
            with contextlib.suppress(EvenarmError):
                self._feed(failed)
            raise
        self.at_rest = self.state.at_rest
        return self.state

    def _begin(self, started: Mapping[str, Any], interrupted: str) -> None:
        failed: said.Failed | None = None
        body = {**started, "position_m": None, "position_known": False}
        try:
            state = self._guard.state()
            self._board.stage(state)
            if state.known and not interrupted:
                body |= {"position_m": state.position_m, "position_known": True}
        except DeviceError as error:
            failed = self._fail(error.what, error.device or "stage", error.mend)
        self._feed(said.Begin(body, interrupted, self._now()))
        if failed is not None:
            self._feed(failed)

    def _next(self) -> said.Input:
        try:
            self._may_go_on()
            pending = self.state.pending
            return said.Continue(self._now()) if pending is None else self._perform(pending)
        except ScanStopped:
            return self._come_to_rest()
        except DeviceError as error:
            if self._stop is not None:  # a stop in the middle of a call looks like a failure
                return self._come_to_rest()
            return self._fail(error.what, error.device or "a device", error.mend)
        except MotionRefused as error:
            if self._stop is not None:
                return self._come_to_rest()
            return self._fail(f"{error.what}: {error.why}", "guard", error.mend)

    def _feed(self, happened: said.Input) -> None:
        """Journal what follows from what happened, then change the state: in that order."""
        for event in decide(self.setup, self.state, happened):
            body = {key: value for key, value in event.body.items() if key != "bench_time_s"}
            self._journal.append(
                event.kind,
                finite(body),
                run=self.setup.run,
                bench_time_s=event.body["bench_time_s"],
            )
            self.state = evolve(self.setup, self.state, event)
            self._board.event(self.state, event, self._journal.head.sha256)

    def _now(self) -> float:
        return self._devices.clock.now_s()

    def _may_go_on(self) -> None:
        if self._stop is not None:
            raise ScanStopped

    # --- ends -----------------------------------------------------------------------------------

    def _come_to_rest(self) -> said.Input:
        """After a stop: say that it was asked for, wait until nothing moves, say where it is."""
        assert self._stop is not None
        by, reason = self._stop
        if not self._stop_noted:
            self._stop_noted = True
            return said.StopAsked(by, reason, self._now())
        state = self._at_rest()
        position_m = state.position_m if state is not None and state.known else None
        at_rest = state is not None
        return said.Stopped(position_m, position_m is not None, at_rest, reason, self._now())

    def _fail(self, what: str, device: str, mend: str = "report it") -> said.Failed:
        state = self._at_rest()
        known = state is not None and state.known
        position_m = state.position_m if state is not None and known else None
        return said.Failed(what, device, mend, position_m, known, state is not None, self._now())

    def _at_rest(self) -> StageState | None:
        """Stop the axis, again and again, until a read-back says that it stands still.

        None where none does within REST_TIMEOUT_S: then nobody may say that nothing moves.
        """
        until_s = self._now() + REST_TIMEOUT_S
        while self._now() < until_s:
            with contextlib.suppress(DeviceError):
                self._guard.stop()
                state = self._guard.state()
                self._board.stage(state)
                if not state.moving:
                    return state
            self._devices.clock.sleep_s(0.05)
        return None

    # --- performing -----------------------------------------------------------------------------

    def _perform(self, pending: Pending) -> said.Input:
        match pending.kind:
            case "question":
                return self._wait_for_answer(str(pending.body["id"]))
            case "source":
                return self._change_source(str(pending.body["source"]))
            case "home":
                return self._home()
            case "move":
                return self._move(pending.body)
            case "scan":
                return self._scan(pending.body)
            case "locate":
                return self._locate(pending.body)

    def _wait_for_answer(self, question_id: str) -> said.Input:
        with self._said:
            self._asking = question_id
            try:
                self._said.wait_for(lambda: self._stop is not None or self._answer is not None)
                answer = self._answer
            finally:
                self._asking = self._answer = None
        if self._stop is not None or answer is None:
            raise ScanStopped
        return said.Answered(*answer, self._now())

    def _change_source(self, name: str) -> said.Input:
        source = self._sources[name]
        if self._devices.changer is not None:
            self._devices.changer.call(
                lambda changer: changer.select(name, timeout_s=CHANGE_TIMEOUT_S),
                timeout_s=CHANGE_TIMEOUT_S,
            )
        elif self._devices.select_by_simulated_hand is not None:
            self._wait(source.change_time_s)
            self._devices.select_by_simulated_hand(name)
        self._wait(source.warm_up_s)
        return said.SourceReady(self._now())

    def _wait(self, duration_s: float) -> None:
        sleep_in_slices(self._devices, duration_s, self._may_go_on_and_tell)

    def _may_go_on_and_tell(self) -> None:
        self._may_go_on()
        self._board.time(self._now())

    def _home(self) -> said.Input:
        self._guard.start_home()
        travel_m = self._spec.stage.travel_m
        assert travel_m is not None
        expected_s = (travel_m[1] - travel_m[0]) / self._spec.stage.speed_m_s
        state = self._wait_for_rest(None, expected_s)
        return said.HomeEnded(state.position_m, self._now())

    def _move(self, body: Mapping[str, Any]) -> said.Input:
        target_m, speed_m_s = float(body["target_m"]), float(body["speed_m_s"])
        distance_m = abs(target_m - (self.state.position_m or 0.0))
        self._guard.start_move(StagePosition(target_m), speed_m_s)
        expected_s = distance_m / speed_m_s + speed_m_s / self._spec.stage.acceleration_m_s2
        state = self._wait_for_rest(target_m, expected_s)
        return said.MoveEnded(state.position_m, self._now())

    def _wait_for_rest(self, target_m: float | None, expected_s: float) -> StageState:
        return wait_for_rest(
            self._guard,
            self._devices,
            self._spec,
            target_m,
            expected_s=expected_s,
            watch=self._board.stage,
            may_go_on=self._may_go_on,
        )

    def _scan(self, body: Mapping[str, Any]) -> said.Input:
        name = str(body["scan"])

        def keep(part: Readings) -> None:
            self._journal.append_readings(
                self.setup.run, name, part.columns, bench_time_s=self._now()
            )
            self._board.readings(part)

        common: dict[str, Callable[..., Any]] = {
            "keep": keep,
            "watch": self._board.stage,
            "may_go_on": self._may_go_on,
        }
        start_m, stop_m = float(body["start_m"]), float(body["stop_m"])
        if body["mode"] == "sweep":
            readings, state = perform_sweep(
                self._guard,
                self._devices,
                self._spec,
                start_m=start_m,
                stop_m=stop_m,
                end_m=float(body["end_m"]),
                speed_m_s=float(body["speed_m_s"]),
                **common,
            )
        else:
            readings, state = perform_step_scan(
                self._guard,
                self._devices,
                self._spec,
                start_m=start_m,
                stop_m=stop_m,
                increment_m=float(body["increment_m"]),
                **common,
            )
        if not readings.signal.size:
            raise ReadingInvalid(
                "the scan brought no usable reading",
                device="detector",
                mend="compare [detector] rate and [stage] acceleration with the real ones",
            )
        # Positions as they go into the locating: smoothed, so not those kept block by block.
        self._journal.append_readings(
            self.setup.run, f"{name} as located", readings.columns, bench_time_s=self._now()
        )
        self._readings = readings
        return said.ScanEnded(
            state.position_m,
            (float(readings.position_m.min()), float(readings.position_m.max())),
            readings.signal.size,
            float(readings.time_s.mean()),
            self._now(),
        )

    def _locate(self, body: Mapping[str, Any]) -> said.Input:
        assert self._readings is not None
        assert self.state.leg is not None
        source = self._sources[str(body["source"])]
        located = locate_readings(self._spec, source, self._readings)
        self._board.located(located)
        found = findings(self._spec, source, self._readings, located, self.state.leg.speed_m_s)
        return said.LocateEnded(found, self._now())
