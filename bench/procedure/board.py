"""The board that a run writes on while it goes on, and that any screen may read at any time."""

from __future__ import annotations

import threading
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from bench.fringes.model import Located
from drivers.contracts import StageState

from .live import LiveView, Question, StepState, StepView
from .results import result_quantities
from .scanning import Readings
from .state import Event, RunState, Setup

__all__ = ["Board"]

FloatArray = NDArray[np.float64]
_DRAWN = 4000
TOLD = frozenset({"source-intended", "home-intended", "move-intended", "scan-intended"})


@dataclass
class _Seen:
    """What is not in the journal's fold: raw views of devices, for the eye only."""

    stage: StageState | None = None
    level: float | None = None
    saturated: bool = False
    parts: list[Readings] = field(default_factory=list)
    trace_label: str = ""
    located: Located | None = None
    expected_s: float | None = None
    intent_since_s: float = 0.0
    intent_expected_s: float | None = None
    remaining_from: tuple[float, float] | None = None  # bench time, seconds left then
    head: str = ""
    told: list[tuple[float, str]] = field(default_factory=list)


class Board:
    """Thread-safe: the conductor writes, screens read."""

    def __init__(self, setup: Setup, *, bench_name: str, simulated: bool) -> None:
        self._lock = threading.Lock()
        self._setup = setup
        self._bench_name = bench_name
        self._simulated = simulated
        self._state = RunState()
        self._seen = _Seen()
        self._now_s = 0.0

    # --- written by the conductor ---------------------------------------------------------------

    def event(self, state: RunState, event: Event, head: str) -> None:
        """Something was journalled, and the run is in ``state`` now."""
        with self._lock:
            seen = self._seen
            self._state, seen.head = state, head
            self._now_s = max(self._now_s, state.time_s)
            if event.kind == "leg-chosen":
                seen.remaining_from = (state.time_s, float(event.body["expected_time_s"]))
            elif event.kind == "scan-intended":
                seen.parts, seen.located = [], None
                seen.trace_label = f"{event.body['name']}, {event.body['source']}"
            if event.kind in TOLD:
                step = self._setup.procedure.steps[state.step].title if state.step >= 0 else ""
                seen.told.append(
                    (state.time_s, f"{step}: {doing(state)}" if step else doing(state))
                )
            elif event.kind == "located":
                seen.told.append((state.time_s, _found(event.body)))
            if event.kind.endswith("-intended"):
                seen.intent_since_s = state.time_s
                seen.intent_expected_s = event.body.get("expected_time_s")

    def head(self, sha256: str) -> None:
        with self._lock:
            self._seen.head = sha256

    def stage(self, state: StageState) -> None:
        with self._lock:
            self._seen.stage = state
            self._now_s = max(self._now_s, state.time_s)

    def time(self, now_s: float) -> None:
        with self._lock:
            self._now_s = max(self._now_s, now_s)

    def readings(self, part: Readings) -> None:
        with self._lock:
            if part.signal.size:
                self._seen.parts.append(part)
                self._seen.level = float(part.signal[-1])
                self._seen.saturated = bool(part.saturated.any())

    def located(self, located: Located) -> None:
        with self._lock:
            self._seen.located = located

    # --- read by screens ------------------------------------------------------------------------

    def told(self, after: int) -> list[tuple[float, str]]:
        """What has been begun and found since the line ``after``, each with its bench time."""
        with self._lock:
            return self._seen.told[after:]

    def view(self) -> LiveView:
        with self._lock:
            return self._view()

    def _view(self) -> LiveView:
        setup, state, seen = self._setup, self._state, self._seen
        belief = state.belief or setup.prior
        x_m, signal = _thinned(seen.parts)
        newest = state.zeros[-1] if state.zeros else None
        verdict: Mapping[str, Any] = state.verdict or {}
        at_end = verdict.get("zero_m"), verdict.get("zero_u_m")
        zero_m, zero_u_m = (
            at_end
            if verdict
            else (newest.zero_m, newest.u_m)
            if newest
            else (
                belief.mean_m,
                None,
            )
        )
        stage = seen.stage
        return LiveView(
            run_id=setup.run,
            bench_name=self._bench_name,
            procedure=setup.procedure.name,
            simulated=self._simulated,
            steps=tuple(self._steps()),
            doing=doing(state),
            next_action=next_action(state),
            question=_question(state),
            source=state.source,
            stage_position_m=stage.position_m if stage else state.position_m,
            stage_moving=stage.moving if stage else False,
            stage_known=stage.known if stage else state.position_known,
            detector_level=seen.level,
            detector_saturated=seen.saturated,
            detector_unit=setup.signal_unit,
            trace_x_m=x_m,
            trace_signal=signal,
            trace_label=seen.trace_label,
            located=seen.located,
            zero_m=zero_m,
            zero_standard_uncertainty_m=zero_u_m,
            half_width_m=1.96 * zero_u_m if zero_u_m is not None else belief.half_width_m,
            half_width_start_m=setup.prior.half_width_m,
            opd_per_m=setup.facts.opd_per_m,
            accept_residual_opd_m=setup.accept.residual_opd_m,
            residual_opd_m=verdict.get("residual_opd_m"),
            residual_opd_standard_uncertainty_m=verdict.get("residual_u_m"),
            elapsed_s=max(0.0, self._now_s - state.began_s),
            remaining_s=self._remaining_s(),
            progress=self._progress() if _moves(state) else None,
            outcome=state.outcome,
            reason=state.reason,
            result=result_quantities(setup, state) if state.phase == "ended" else {},
            head=seen.head,
            position_trusted=state.position_known or state.phase == "new",
            at_rest=state.at_rest,
            roughly_located=state.findings is not None and not state.zeros,
        )

    def _steps(self) -> list[StepView]:
        state = self._state
        rows = []
        for index, step in enumerate(self._setup.procedure.steps):
            mark: StepState = "open"
            if index in state.failed_steps:
                mark = "failed"
            elif index < state.step or (index == state.step and not state.step_open):
                mark = "done"
            elif index == state.step:
                mark = "now"
            if mark == "done" and state.phase == "ended" and index == state.step:
                mark = "done" if state.outcome in {"accepted", "rejected"} else "failed"
            detail = state.leg.why if mark == "now" and state.leg is not None else ""
            rows.append(StepView(step.title, mark, detail))
        return rows

    def _remaining_s(self) -> float | None:
        if self._state.phase != "running" or self._seen.remaining_from is None:
            return None
        since_s, left_s = self._seen.remaining_from
        return max(0.0, left_s - (self._now_s - since_s))

    def _progress(self) -> float | None:
        expected_s = self._seen.intent_expected_s
        if self._state.pending is None or not expected_s:
            return None
        return min(1.0, (self._now_s - self._seen.intent_since_s) / expected_s)


def _thinned(parts: list[Readings]) -> tuple[FloatArray, FloatArray]:
    """The newest scan for drawing: every pair of extremes kept, so that no fringe disappears."""
    if not parts:
        return np.empty(0), np.empty(0)
    x_m = np.concatenate([part.position_m for part in parts])
    signal = np.concatenate([part.signal for part in parts])
    if signal.size <= _DRAWN:
        return x_m, signal
    groups = np.array_split(np.arange(signal.size), _DRAWN // 2)
    keep = sorted(
        {int(g[np.argmin(signal[g])]) for g in groups}
        | {int(g[np.argmax(signal[g])]) for g in groups}
    )
    return x_m[keep], signal[keep]


def _found(body: Mapping[str, Any]) -> str:
    """A located entry in a few words."""
    from bench.quantities import show

    if not body["found"]:
        return f"no packet there: {body['reason']}"
    return f"packet at {show(body['zero_m'] * 1e3, body['zero_u_m'] * 1e3, 'mm')}"


def _moves(state: RunState) -> bool:
    """Whether something goes on whose share done can be told from the time it takes."""
    return state.pending is not None and state.pending.kind in {"source", "home", "move", "scan"}


def _question(state: RunState) -> Question | None:
    pending = state.pending
    if pending is None or pending.kind != "question":
        return None
    body = pending.body
    return Question(str(body["id"]), body["kind"], str(body["title"]), tuple(body["lines"]))


def doing(state: RunState) -> str:
    """What the bench does, in a few words."""
    if state.phase == "new":
        return "nothing moves"
    if state.phase == "ended":
        if not state.at_rest:
            return "the run has ended; THE STAGE MAY STILL MOVE"
        return "the run has ended; nothing moves"
    pending = state.pending
    if pending is None:
        return "choosing what comes next"
    match pending.kind:
        case "question":
            return "waiting for you; nothing moves"
        case "source":
            return f"changing the source to {pending.body['source']}"
        case "home":
            return "homing the stage"
        case "move":
            return f"moving to {pending.body['target_m'] * 1e3:.4f} mm, {pending.body['why']}"
        case "scan":
            how = "sweeping" if pending.body["mode"] == "sweep" else "stepping"
            low, high = pending.body["start_m"] * 1e3, pending.body["stop_m"] * 1e3
            return f"{how} {low:.4f} to {high:.4f} mm with {pending.body['source']}"
        case _:
            return "locating the packet"


def next_action(state: RunState) -> str:
    """What the operator does next."""
    if state.phase == "new":
        return "Begin the run"
    if state.phase == "ended" and not state.at_rest:
        return "Use the power switch of the stage's controller"
    if state.phase == "ended":
        return {
            "accepted": "Done. The stage stands at the zero; leave it there",
            "rejected": "Read the reason and mend it; a new run starts from the shell",
            "not found": "Check beams and sources, widen [expect]; a new run starts from the shell",
            "stopped": "Look where the stage stands; a new run starts from the shell",
        }.get(state.outcome or "", "Mend what the reason names; a new run starts from the shell")
    question = _question(state)
    if question is None:
        return "Wait; keep hands and draughts away"
    return "Read, then type your name" if question.kind == "acknowledge" else "Answer yes or no"
