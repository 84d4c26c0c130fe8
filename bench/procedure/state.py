"""A run as a value: what is known, what is outstanding, and how an event changes it.

``evolve`` is the only place where the state changes, and it sees nothing but events that are in the
journal. Screens, reports and recovery fold the same events and come to the same state.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from typing import Any, Literal

from bench.planning.belief import Belief
from bench.planning.model import BenchFacts, Leg
from bench.spec.model import AcceptSpec

from .acceptance import ZeroFound
from .text import Procedure

__all__ = ["Event", "Pending", "RunState", "Setup", "evolve"]

POSITION = "position"  # the question whether the stage may home
Phase = Literal["new", "running", "ended"]
SourceChange = Literal["motor", "simulated", "hand"]


@dataclass(frozen=True)
class Setup:
    """What does not change in a run. ``by`` answers in place of a person in an unattended run."""

    run: str
    procedure: Procedure
    facts: BenchFacts
    prior: Belief
    accept: AcceptSpec
    caution_lines: tuple[str, ...]
    source_change: SourceChange
    signal_unit: str
    at_wavelength_m: float | None
    unattended: bool
    by: str


@dataclass(frozen=True)
class Event:
    """Something that was decided or happened, as it goes into the journal."""

    kind: str
    body: Mapping[str, Any]


@dataclass(frozen=True)
class Pending:
    """What the run waits for: the intent whose outcome is not known yet."""

    kind: Literal["question", "source", "home", "move", "scan", "locate"]
    body: Mapping[str, Any]


@dataclass(frozen=True)
class RunState:
    """A run at one moment. ``step`` is the index of the present step, -1 before the first."""

    phase: Phase = "new"
    step: int = -1
    step_open: bool = False
    pending: Pending | None = None
    belief: Belief | None = None
    source: str | None = None
    position_m: float | None = None
    position_known: bool = False
    at: str = ""  # the role of the last position reached, such as "run-up" or "zero"
    leg: Leg | None = None
    last_leg: Leg | None = None
    legs_run: int = 0
    went_back: int = 0
    scans_run: int = 0
    zeros: tuple[ZeroFound, ...] = ()
    missed: str = ""
    dark: bool = False  # the newest scan saw no light at all
    interrupted: str = ""
    may_home: bool = False
    at_rest: bool = True
    scan_from_m: float | None = None  # where the newest scan began to take up the play
    left_at_m: float | None = None
    left_at_s: float | None = None
    findings: Mapping[str, Any] | None = None  # the body of the last located packet
    verdict: Mapping[str, Any] | None = None
    measurements: tuple[str, ...] = ()
    failed_steps: frozenset[int] = frozenset()
    refused: str = ""
    outcome: str | None = None
    reason: str = ""
    began_s: float = 0.0
    time_s: float = 0.0

    def zero(self, scan: str) -> ZeroFound | None:
        """The zero that the scan called ``scan`` found, the newest where it was repeated."""
        return next((zero for zero in reversed(self.zeros) if zero.scan == scan), None)


def evolve(setup: Setup, state: RunState, event: Event) -> RunState:
    """The state after ``event``. Pure; unknown kinds change nothing but the time."""
    time_s = event.body.get("bench_time_s")
    if isinstance(time_s, (int, float)) and math.isfinite(time_s):
        state = replace(state, time_s=float(time_s))
    change = _CHANGES.get(event.kind)
    return state if change is None else change(setup, state, event.body)


Body = Mapping[str, Any]
_Change = Callable[[Setup, RunState, Body], RunState]


def _run_started(setup: Setup, state: RunState, body: Body) -> RunState:
    return replace(
        state,
        phase="running",
        belief=setup.prior,
        position_m=body.get("position_m"),
        position_known=bool(body.get("position_known")),
        began_s=float(body.get("bench_time_s", 0.0)),
        interrupted=str(body.get("interrupted", "")),
    )


def _step_started(_setup: Setup, state: RunState, body: Body) -> RunState:
    index = int(body["index"])
    went_back = state.went_back + (1 if index < state.step else 0)
    return replace(
        state,
        step=index,
        step_open=True,
        went_back=went_back,
        missed="",
        failed_steps=frozenset(i for i in state.failed_steps if i < index),
    )


def _step_done(_setup: Setup, state: RunState, body: Body) -> RunState:
    failed = state.failed_steps if body.get("passed", True) else state.failed_steps | {state.step}
    return replace(state, step_open=False, failed_steps=failed)


def _question_asked(_setup: Setup, state: RunState, body: Body) -> RunState:
    return replace(state, pending=Pending("question", body))


def _question_answered(_setup: Setup, state: RunState, body: Body) -> RunState:
    refused = "" if body["accepted"] else f"the operator said no to: {body['title']}"
    may_home = state.may_home or (body["id"] == POSITION and bool(body["accepted"]))
    return replace(state, pending=None, refused=refused, may_home=may_home)


def _intended(kind: Literal["source", "home", "move", "scan"]) -> _Change:
    def change(_setup: Setup, state: RunState, body: Body) -> RunState:
        moves = kind in {"home", "move", "scan"}
        return replace(state, pending=Pending(kind, body), at="" if moves else state.at)

    return change


def _source_selected(_setup: Setup, state: RunState, body: Body) -> RunState:
    return replace(state, pending=None, source=str(body["source"]))


def _home_done(_setup: Setup, state: RunState, body: Body) -> RunState:
    return replace(
        state, pending=None, position_known=True, position_m=float(body["position_m"]), at=""
    )


def _move_done(_setup: Setup, state: RunState, body: Body) -> RunState:
    position_m = float(body["position_m"])
    role = str(body["role"])
    at_zero = role == "zero"
    return replace(
        state,
        pending=None,
        position_m=position_m,
        at=role,
        scan_from_m=position_m if role == "overshoot" else state.scan_from_m,
        left_at_m=position_m if at_zero else state.left_at_m,
        left_at_s=state.time_s if at_zero else state.left_at_s,
    )


def _scan_done(_setup: Setup, state: RunState, body: Body) -> RunState:
    return replace(
        state,
        pending=Pending("locate", {**body}),
        position_m=float(body["position_m"]),
        scans_run=state.scans_run + 1,
    )


def _leg_chosen(_setup: Setup, state: RunState, body: Body) -> RunState:
    leg = Leg(**body["leg"])
    return replace(state, leg=leg, last_leg=leg, legs_run=state.legs_run + 1, at="")


def _located(setup: Setup, state: RunState, body: Body) -> RunState:
    leg, belief = state.leg, state.belief
    assert leg is not None
    assert belief is not None
    state = replace(state, pending=None, leg=None)
    if not body["found"]:
        state = replace(state, dark=bool(body.get("dark", False)))
        if body.get("blind", False) or state.dark:
            return replace(state, missed=str(body.get("reason", "")))
        low_m, high_m = body["read_m"]  # no evidence of what was not read
        belief = belief.missed(low_m, high_m, leg.detection_probability)
        return replace(state, belief=belief, missed=str(body.get("reason", "")))
    zero = ZeroFound(
        scan=str(body["name"]),
        zero_m=body["zero_m"],
        u_m=body["zero_u_m"],
        time_s=body["zero_time_s"],
        common_u_m=body.get("zero_common_u_m", 0.0),
    )
    shift_m = _glass_shift_m(setup.facts, leg) if leg.purpose == "search" else 0.0
    belief = belief.found(zero.zero_m, math.hypot(zero.u_m, shift_m))
    zeros = (*state.zeros, zero) if leg.purpose != "search" else state.zeros
    return replace(state, belief=belief, zeros=zeros, findings=body, missed="")


def _glass_shift_m(facts: BenchFacts, leg: Leg) -> float:
    """How far another source's group zero may sit from this one's where glass is unbalanced.

    Sources of nearly the same mean wavelength (a thousandth) see the same glass.
    """
    mean_m = {source.name: source.mean_wavelength_m for source in facts.sources}
    seen_m = mean_m[leg.source]
    same = all(abs(other_m / seen_m - 1.0) <= 1e-3 for other_m in mean_m.values())
    return 0.0 if same else facts.glass_shift_m


def _judged(_setup: Setup, state: RunState, body: Body) -> RunState:
    return replace(state, verdict=body)


def _measurement(_setup: Setup, state: RunState, body: Body) -> RunState:
    return replace(state, measurements=(*state.measurements, str(body["id"])))


def _stopped(_setup: Setup, state: RunState, body: Body) -> RunState:
    return replace(
        state,
        pending=None,
        position_m=body.get("position_m"),
        position_known=bool(body.get("position_known")),
        at_rest=bool(body.get("at_rest", True)),
        at="",
    )


def _run_ended(_setup: Setup, state: RunState, body: Body) -> RunState:
    return replace(
        state,
        phase="ended",
        pending=None,
        step_open=False,
        outcome=str(body["outcome"]),
        reason=str(body["reason"]),
    )


_CHANGES: dict[str, _Change] = {
    "run-started": _run_started,
    "step-started": _step_started,
    "step-done": _step_done,
    "question-asked": _question_asked,
    "question-answered": _question_answered,
    "source-intended": _intended("source"),
    "source-selected": _source_selected,
    "home-intended": _intended("home"),
    "home-done": _home_done,
    "move-intended": _intended("move"),
    "move-done": _move_done,
    "scan-intended": _intended("scan"),
    "scan-done": _scan_done,
    "leg-chosen": _leg_chosen,
    "located": _located,
    "judged": _judged,
    "measurement": _measurement,
    "stopped": _stopped,
    "move-failed": _stopped,
    "run-ended": _run_ended,
}
