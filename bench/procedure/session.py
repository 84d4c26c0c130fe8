"""A run from the bench description to its result: what a screen or a command holds in its hand."""

from __future__ import annotations

import os
import socket
import threading
from collections.abc import Callable
from dataclasses import dataclass, replace
from datetime import datetime
from typing import TYPE_CHECKING, Any

from bench import __version__
from bench.errors import BenchFault, EvenarmError, UsageError, printable
from bench.journal import open_journal
from bench.spec.model import BenchSpec

from .board import Board
from .cautions import cautions
from .conductor import Conductor
from .devices import Devices, as_fault, open_devices
from .facts import belief_from, bench_facts
from .guard import Guard
from .live import LiveView
from .recovery import KINDS, LeftOpen, left_open
from .state import RunState, Setup, SourceChange
from .text import Procedure

if TYPE_CHECKING:
    from bench.journal import Journal

__all__ = ["Revealed", "RunOptions", "RunSession"]

CLOSE_TIMEOUT_S = 15.0


@dataclass(frozen=True)
class Revealed:
    """What a simulated bench hid. ``zero_m`` is a reading, approached as the stage stands now."""

    zero_m: float
    residual_opd_m: float


@dataclass(frozen=True)
class RunOptions:
    """How a run is performed. ``acknowledged_by`` is who consented to an unattended run."""

    operator: str
    unattended: bool = False
    acknowledged_by: str | None = None
    pace: float | None = None


class RunSession:
    """One run on one bench. Thread-safe; ``run`` performs it here, ``start`` in its own thread."""

    def __init__(
        self,
        spec: BenchSpec,
        procedure: Procedure,
        options: RunOptions,
        *,
        now: Callable[[], datetime],
        run_id: str,
    ) -> None:
        """Raises UsageError where this run may not be performed on this bench."""
        self._spec = spec
        self._options = options
        self._now = now
        facts = bench_facts(spec)
        if spec.stage.travel_m is None:
            raise UsageError(
                "nothing may move on this bench",
                where=str(spec.path),
                why="[stage] travel is missing: no limits, no motion",
                mend='give the soft limits, such as travel = ["0 mm", "25 mm"]',
            )
        self._setup = Setup(
            run=run_id,
            procedure=procedure,
            facts=facts,
            prior=belief_from(spec),
            accept=spec.accept,
            caution_lines=cautions(spec),
            source_change="hand",
            signal_unit=spec.detector.unit,
            at_wavelength_m=spec.reference_wavelength_m,
            unattended=options.unattended,
            by=_answers(options),
        )
        simulated = spec.simulation is not None
        self._board = Board(self._setup, bench_name=spec.name, simulated=simulated)
        self._lock = threading.Lock()
        self._conductor: Conductor | None = None
        self._devices: Devices | None = None
        self._guard: Guard | None = None
        self._journal: Journal | None = None
        self._left_open = LeftOpen((), "")
        self._thread: threading.Thread | None = None
        self._begun = False
        self._ended = threading.Event()
        self._stop_wanted: str | None = None
        self.error: EvenarmError | None = None
        self.truth: Revealed | None = None

    # --- the run --------------------------------------------------------------------------------

    def run(self) -> RunState:
        """Open what is needed, perform the run here, close it again. Raises EvenarmError."""
        with self._lock:
            if self._begun:
                raise UsageError("this run was already begun", mend="begin a new one")
            self._begun = True
        try:
            conductor = self._open()
            if self._stop_wanted is not None:
                conductor.stop(self._options.operator, self._stop_wanted)
            state = conductor.run(self._started(), self._left_open.why)
            self._end_interrupted()
            self._look_behind(state)
            return state
        finally:
            try:
                self._close()
            finally:
                self._ended.set()

    def _open(self) -> Conductor:
        spec, options = self._spec, self._options
        self._journal = open_journal(
            spec.records_url, write=True, who=printable(options.operator, 60), now=self._now
        )
        self._left_open = left_open(self._journal.entries(kinds=KINDS))
        self._devices = open_devices(spec, pace=options.pace)
        self._refuse_unattended(self._devices)
        change: SourceChange = "hand"
        if self._devices.changer is not None:
            change = "motor"
        elif self._devices.select_by_simulated_hand is not None:
            change = "simulated"
        self._setup = replace(self._setup, source_change=change)
        self._guard = Guard(self._devices.stage, spec.stage)
        try:
            self._guard.arm()
        except Exception as error:
            raise _as_evenarm(error) from error
        conductor = Conductor(
            self._setup, spec, self._devices, self._guard, self._journal, self._board
        )
        with self._lock:
            self._conductor = conductor
        return conductor

    def _refuse_unattended(self, devices: Devices) -> None:
        """What an unattended run must not do. Raises UsageError."""
        options, spec = self._options, self._spec
        if not options.unattended:
            return
        acknowledged = bool(options.acknowledged_by)
        if not devices.simulated and not (spec.allow_unattended and acknowledged):
            raise UsageError(
                "this bench may not run unattended",
                where=str(spec.path),
                why="its devices are real; that needs allow_unattended = true in [bench] and the "
                "name of who answers for it",
                mend="run it attended, or set allow_unattended and give --acknowledge NAME",
            )
        by_hand = devices.changer is None and devices.select_by_simulated_hand is None
        if by_hand and len(spec.sources) > 1:
            raise UsageError(
                "this bench cannot run unattended",
                where=str(spec.path),
                why="its sources are changed by hand",
                mend="run it attended, or describe one source only",
            )
        if self._left_open.why and not acknowledged:
            raise UsageError(
                "the stage position is not known, and an unattended run asks nothing",
                where=spec.records_url,
                why=self._left_open.why,
                mend="look at the stage; then run it attended, which asks before it homes the "
                "stage, or give --acknowledge NAME to answer for homing it",
            )

    def _started(self) -> dict[str, Any]:
        assert self._devices is not None
        spec, setup, options = self._spec, self._setup, self._options
        low_m, high_m = setup.prior.interval(0.95)
        return {
            "procedure": setup.procedure.name,
            "procedure_sha256": setup.procedure.sha256,
            "bench_name": spec.name,
            "bench_sha256": spec.sha256,
            "operator": options.operator,
            "acknowledged_by": options.acknowledged_by,
            "unattended": options.unattended,
            "simulated": self._devices.simulated,
            "seed": spec.simulation.seed if spec.simulation is not None else None,
            "version": __version__,
            "host": socket.gethostname(),
            "process": os.getpid(),
            "devices": {
                role: {"maker": who.maker, "model": who.model, "serial": who.serial}
                for role, who in self._devices.identities().items()
            },
            "opd_per_m": spec.opd_per_m,
            "expected": {"from_m": low_m, "to_m": high_m},
        }

    def _end_interrupted(self) -> None:
        """Runs that a crash left open get an end, once the position was cleared up by this one.

        A run that ended before the stage was homed leaves them open, so that the next asks again.
        """
        assert self._journal is not None
        assert self._conductor is not None
        if self._left_open.why and not self._conductor.state.position_known:
            return
        for run in self._left_open.runs:
            body = {"outcome": "fault", "reason": "interrupted: the program ended before the run"}
            self._journal.append("run-ended", {**body, "measurements": []}, run=run)
        self._board.head(self._journal.head.sha256)

    def _close(self) -> None:
        if self._guard is not None:
            self._guard.close()
        if self._devices is not None:
            self._devices.close()
        if self._journal is not None:
            self._journal.close()

    # --- what a screen asks (bench.tui.control.RunControl) -----------------------------------

    @property
    def run_id(self) -> str:
        return self._setup.run

    @property
    def state(self) -> RunState | None:
        """The run's newest state, None before it began."""
        return self._conductor.state if self._conductor is not None else None

    @property
    def setup(self) -> Setup:
        return self._setup

    @property
    def spec(self) -> BenchSpec:
        return self._spec

    @property
    def started(self) -> bool:
        return self._begun or self._thread is not None

    @property
    def finished(self) -> bool:
        return self._ended.is_set()

    def told(self, after: int) -> list[tuple[float, str]]:
        """The account of the run since line ``after``: bench time and a few words."""
        return self._board.told(after)

    def view(self) -> LiveView:
        view = self._board.view()
        if self.error is not None and view.outcome is None:
            at_rest = self._conductor is None or self._conductor.at_rest
            return replace(
                view,
                outcome="fault",
                reason=" - ".join(line.strip() for line in self.error.lines()),
                error_lines=tuple(line.strip() for line in self.error.lines()),
                at_rest=at_rest,
                position_trusted=view.position_trusted and at_rest,
                doing=(
                    "the run has ended; nothing moves"
                    if at_rest
                    else "the run has ended; THE STAGE MAY STILL MOVE"
                ),
                next_action=(
                    "Mend what is named; a new run starts from the shell"
                    if at_rest
                    else "Use the power switch of the stage's controller"
                ),
                question=None,
            )
        return view

    def start(self) -> None:
        """Begin in a thread of its own. Raises UsageError if it was begun before."""
        if self._thread is not None:
            raise UsageError("this run was already begun", mend="begin a new one")
        self._thread = threading.Thread(target=self.perform, name="conductor", daemon=True)
        self._thread.start()

    def perform(self) -> RunState | None:
        """As ``run``, but what it raises is kept in ``error`` for whoever watches."""
        try:
            return self.run()
        except Exception as error:  # noqa: BLE001 - shown to the operator, whatever it is
            self.error = _as_evenarm(error)
            return None

    def answer(self, question_id: str, value: str | bool) -> None:
        """A name for words to acknowledge, yes or no for the others."""
        conductor = self._conductor
        if conductor is None:
            return
        if isinstance(value, str):
            name = printable(value, 80).strip()
            if len(name) < 2:
                raise UsageError("a name is needed", mend="type your name, two letters or more")
            conductor.answer(question_id, True, name)
        else:
            conductor.answer(question_id, value, self._options.operator)

    def stop(self, reason: str) -> None:
        with self._lock:
            self._stop_wanted = self._stop_wanted or reason
            conductor = self._conductor
        if conductor is not None:
            conductor.stop(self._options.operator, reason)

    def close(self, timeout_s: float = CLOSE_TIMEOUT_S) -> None:
        if self.started and not self.finished:
            self.stop("the program was closed")
        if self._thread is not None:
            self._thread.join(timeout=timeout_s)

    def _look_behind(self, state: RunState) -> None:
        """Keep what a simulated bench hides: the true OPD where the stage stands now."""
        assert self._devices is not None
        at_m = self._setup.at_wavelength_m
        found = (state.findings or {}).get("at_wavelength")
        if at_m is None and found is not None:
            at_m = float(found["value"]) * 1e-9
        hidden = self._devices.residual_opd_m
        if hidden is None or at_m is None or state.position_m is None:
            return
        residual_m = hidden(at_m)
        zero_m = state.position_m - residual_m / self._setup.facts.opd_per_m
        self.truth = Revealed(zero_m=zero_m, residual_opd_m=residual_m)


def _answers(options: RunOptions) -> str:
    """Who stands behind the answers of a run; nobody's name goes where nobody was asked."""
    if options.acknowledged_by:
        return options.acknowledged_by
    if options.unattended:
        return f"nobody: unattended, started by {options.operator}"
    return options.operator


def _as_evenarm(error: Exception) -> EvenarmError:
    from drivers.contracts import DeviceError

    if isinstance(error, EvenarmError):
        return error
    if isinstance(error, DeviceError):
        return as_fault(error)
    return BenchFault(
        "the program failed in a way that it does not know",
        why=f"{type(error).__name__}: {error}",
        mend="report it with the journal",
    )
