"""What a run does next. ``decide`` is pure: a state and what just happened in, events out.

Events that intend something (a question, a source, a move, a scan) leave the state with something
outstanding; the conductor performs it and comes back with what happened. ``Continue`` asks for the
next thing when nothing is outstanding.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict
from typing import Any

from bench.planning import plan_search, scan_ends
from bench.planning.model import Leg, Plan

from .acceptance import combine, judge
from .inputs import (
    Answered,
    Begin,
    Continue,
    Failed,
    HomeEnded,
    Input,
    LocateEnded,
    MoveEnded,
    ScanEnded,
    SourceReady,
    StopAsked,
    Stopped,
)
from .results import measurements, result_quantities
from .state import POSITION, Event, RunState, Setup, evolve
from .text import ProcedureStep

__all__ = ["MOST_LEGS", "MOST_RETURNS", "decide"]

MOST_LEGS = 60
MOST_RETURNS = 2
NOT_AT_REST = (
    "the stage did not confirm that it stands still: use the power switch of its controller"
)


# --- the decision -------------------------------------------------------------------------------


def decide(setup: Setup, state: RunState, happened: Input) -> tuple[Event, ...]:
    """The events that follow from ``happened`` in ``state``; none where it changes nothing."""
    events = _decide(setup, state, happened)
    return tuple(
        Event(event.kind, {**event.body, "bench_time_s": happened.time_s}) for event in events
    )


def _decide(setup: Setup, state: RunState, happened: Input) -> tuple[Event, ...]:
    if state.phase == "ended":
        return ()
    match happened:
        case Begin():
            return _begin(setup, state, happened)
        case StopAsked():
            return (Event("stop-requested", {"by": happened.by, "reason": happened.reason}),)
        case Stopped():
            return _stopped(setup, state, happened)
        case Failed():
            return _failed(setup, state, happened)
        case Continue():
            return _continue(setup, state)
        case _:
            return _outcome(setup, state, happened)


def _begin(setup: Setup, state: RunState, happened: Begin) -> tuple[Event, ...]:
    if state.phase != "new":
        return ()
    return (Event("run-started", {**happened.body, "interrupted": happened.interrupted}),)


def _find_position(setup: Setup, state: RunState) -> tuple[Event, ...]:
    """Nothing moves from a position that is not known, homing neither, before somebody agreed."""
    if state.may_home:
        return (Event("home-intended", {"why": "the stage position is not known"}),)
    why = state.interrupted or "The stage does not know where it is."
    question = {
        "id": POSITION,
        "kind": "confirm",
        "title": "The stage position is not known",
        "lines": [
            why,
            "Look at the stage. It must be free to travel to its origin.",
            "Yes: it is homed now, which moves it. No: the run ends and nothing moves.",
        ],
    }
    return _ask(setup, question)


def _ask(setup: Setup, question: Mapping[str, Any]) -> tuple[Event, ...]:
    asked = Event("question-asked", question)
    return (asked, _answer(question, True, setup.by)) if setup.unattended else (asked,)


def _answer(question: Mapping[str, Any], accepted: bool, by: str) -> Event:
    kept = {"id": question["id"], "title": question["title"]}
    return Event("question-answered", {**kept, "accepted": accepted, "by": by})


def _outcome(setup: Setup, state: RunState, happened: Input) -> tuple[Event, ...]:
    """The end of what was outstanding. An answer to nothing changes nothing."""
    pending = state.pending
    if pending is None:
        return ()
    match pending.kind, happened:
        case "question", Answered():
            answer = _answer(pending.body, happened.accepted, happened.by)
            if happened.accepted and "source" in pending.body:
                # In place, but perhaps not warm yet: that is waited for like any other change.
                return (answer, Event("source-intended", {"source": pending.body["source"]}))
            return (answer,)
        case "source", SourceReady():
            return (Event("source-selected", {"source": pending.body["source"]}),)
        case "home", HomeEnded():
            return (Event("home-done", {"position_m": happened.position_m}),)
        case "move", MoveEnded():
            body = {"position_m": happened.position_m, "role": pending.body["role"]}
            return (Event("move-done", body),)
        case "scan", ScanEnded():
            body = {
                "scan": pending.body["scan"],
                "name": pending.body["name"],
                "source": pending.body["source"],
                "rows": happened.rows,
                "read_m": list(happened.read_m),
                "position_m": happened.position_m,
                "mean_time_s": happened.mean_time_s,
            }
            return (Event("scan-done", body),)
        case "locate", LocateEnded():
            kept = {key: pending.body[key] for key in ("scan", "name", "source", "read_m")}
            return (Event("located", {**kept, **happened.body}),)
        case _:
            return ()


def _where(state: RunState, happened: Stopped | Failed) -> dict[str, Any]:
    """Where the stage came to rest: a position that was not known is not known by stopping there.

    After a crash a controller may still claim one; only homing restores the trust.
    """
    known = happened.position_known and state.position_known
    return {
        "position_m": happened.position_m if known else None,
        "position_known": known,
        "at_rest": happened.at_rest,
    }


def _stopped(setup: Setup, state: RunState, happened: Stopped) -> tuple[Event, ...]:
    stopped = Event("stopped", _where(state, happened))
    after = evolve(setup, state, stopped)
    if not happened.at_rest:
        reason = f"{happened.reason}, but {NOT_AT_REST}"
        return (stopped, _end(setup, after, "fault", reason))
    return (stopped, _end(setup, after, "stopped", happened.reason))


def _failed(setup: Setup, state: RunState, happened: Failed) -> tuple[Event, ...]:
    body = {
        "what": happened.what,
        "device": happened.device,
        "mend": happened.mend,
        **_where(state, happened),
    }
    reason = f"{happened.device}: {happened.what}"
    if happened.mend:
        reason += f" ({happened.mend})"
    if not happened.at_rest:
        reason += f"; {NOT_AT_REST}"
    failed = Event("move-failed", body)
    return (failed, _end(setup, evolve(setup, state, failed), "fault", reason))


def _end(setup: Setup, state: RunState, outcome: str, reason: str) -> Event:
    """The last entry of a run; it repeats the result, so that it can be read alone."""
    body: dict[str, Any] = {"outcome": outcome, "reason": reason}
    body |= result_quantities(setup, state)
    body["measurements"] = list(state.measurements)
    return Event("run-ended", body)


# --- going on -----------------------------------------------------------------------------------


def _continue(setup: Setup, state: RunState) -> tuple[Event, ...]:
    if state.phase == "new" or state.pending is not None:
        return ()
    if state.refused:
        return (_end(setup, state, "stopped", state.refused),)
    if not state.position_known:
        return _find_position(setup, state)
    if state.dark:
        return _not_found(setup, state, state.missed)
    if state.leg is not None:
        return _leg_on(setup, state, state.leg)
    if not state.step_open:
        return _next_step(setup, state)
    step = setup.procedure.steps[state.step]
    match step.kind:
        case "caution" | "confirm":
            # The question went out with the step's start; nothing outstanding means it is answered.
            return (Event("step-done", {}),)
        case "search":
            return _search(setup, state)
        case "scan":
            return _scan(setup, state, step)
        case "move":
            return _move_to_zero(setup, state)
        case "compare":
            return _compare(setup, state, step)
        case "record":
            return (*measurements(setup, state), Event("step-done", {}))
        case _:
            raise AssertionError(f"unknown step kind {step.kind}")


def _next_step(setup: Setup, state: RunState) -> tuple[Event, ...]:
    index = state.step + 1
    if index < len(setup.procedure.steps):
        step = setup.procedure.steps[index]
        body = {"index": index, "kind": step.kind, "title": step.title}
        started = Event("step-started", body)
        if step.kind in {"caution", "confirm"}:
            return (started, *_ask(setup, _question(setup, step, index)))
        return (started,)
    if state.verdict is None:
        return (_end(setup, state, "rejected", "this procedure does not judge its result"),)
    accepted = bool(state.verdict["accepted"])
    outcome = "accepted" if accepted else "rejected"
    return (_end(setup, state, outcome, str(state.verdict["reason"])),)


def _question(setup: Setup, step: ProcedureStep, index: int) -> dict[str, Any]:
    lines = [*step.text, *(setup.caution_lines if step.include_bench else ())]
    kind = "acknowledge" if step.kind == "caution" else "confirm"
    return {"id": f"step-{index}", "kind": kind, "title": step.title, "lines": lines}


def _plan(setup: Setup, state: RunState) -> Plan:
    assert state.belief is not None
    return plan_search(setup.facts, state.belief, state.source, position_m=state.position_m)


def _search(setup: Setup, state: RunState) -> tuple[Event, ...]:
    if state.legs_run >= MOST_LEGS:
        return _not_found(setup, state, f"{MOST_LEGS} scans were made without locating a packet")
    plan = _plan(setup, state)
    if not plan.legs:
        seen = f"; the last scan says: {state.missed}" if state.missed else ""
        return _not_found(setup, state, "the packet is not where it was expected" + seen)
    leg = plan.legs[0]
    if leg.purpose != "search":
        return (Event("step-done", {}),)
    if state.last_leg is not None and _where_and_how(leg) == _where_and_how(state.last_leg):
        return _not_found(
            setup,
            state,
            "the same scan would be made again; the zero may lie where no scan can read, so near "
            "an end of the travel that the stage does not reach its speed there",
        )
    return (_chosen(leg, plan.expected_time_s),)


def _where_and_how(leg: Leg) -> tuple[object, ...]:
    return (leg.source, leg.start_m, leg.stop_m, leg.speed_m_s, leg.increment_m)


def _not_found(setup: Setup, state: RunState, reason: str) -> tuple[Event, ...]:
    return (Event("step-done", {"passed": False}), _end(setup, state, "not found", reason))


def _chosen(leg: Leg, expected_time_s: float) -> Event:
    return Event("leg-chosen", {"leg": asdict(leg), "expected_time_s": expected_time_s})


def _scan(setup: Setup, state: RunState, step: ProcedureStep) -> tuple[Event, ...]:
    if state.zero(step.name) is not None:
        return (Event("step-done", {}),)
    plan = _plan(setup, state)
    final = next((leg for leg in plan.legs if leg.purpose == "final"), None)
    bracketed = bool(plan.legs) and plan.legs[0].purpose != "search"
    if state.legs_run >= MOST_LEGS:
        return _not_found(setup, state, f"{MOST_LEGS} scans were made and the zero is not located")
    if not state.missed and final is not None and bracketed:
        return (_chosen(final, plan.expected_time_s),)
    why = state.missed or "the zero is not bracketed well enough for it"
    reason = f"the scan {step.name!r} saw no packet: {why}"
    failed = Event("step-done", {"passed": False})
    if step.if_missed == "search" and state.went_back < MOST_RETURNS:
        back = max(
            index
            for index, earlier in enumerate(setup.procedure.steps[: state.step])
            if earlier.kind == "search"
        )
        title = setup.procedure.steps[back].title
        again = {"index": back, "kind": "search", "title": title, "why": reason}
        return (failed, Event("step-started", again))
    outcome = "not found" if not state.zeros else "rejected"
    return (failed, _end(setup, state, outcome, reason))


# --- one leg --------------------------------------------------------------------------------------


def _leg_on(setup: Setup, state: RunState, leg: Leg) -> tuple[Event, ...]:
    if state.source != leg.source:
        return _change_source(setup, state, leg)
    facts = setup.facts
    ends = scan_ends(facts, leg)
    if state.at not in {"overshoot", "run-up"}:
        why = f"overshoot before the scan with {leg.source}"
        return (_move(setup, state, ends.overshoot_m, "overshoot", why),)
    if state.at == "overshoot":
        why = f"from the approach side to the start of the scan with {leg.source}"
        return (_move(setup, state, ends.begin_m, "run-up", why),)
    step = setup.procedure.steps[state.step]
    body = {
        "scan": f"scan-{state.scans_run + 1}",
        "name": step.name or f"leg {state.legs_run}",
        "source": leg.source,
        "mode": leg.mode,
        "purpose": leg.purpose,
        "start_m": leg.start_m,
        "stop_m": leg.stop_m,
        "end_m": ends.end_m,
        "speed_m_s": leg.speed_m_s,
        "increment_m": leg.increment_m,
        "integration_s": facts.integration_s,
        "expected_time_s": leg.expected_time_s,
    }
    return (Event("scan-intended", body),)


def _change_source(setup: Setup, state: RunState, leg: Leg) -> tuple[Event, ...]:
    if setup.source_change != "hand":
        return (Event("source-intended", {"source": leg.source}),)
    question = {
        "id": f"source {leg.source} for scan {state.scans_run + 1}",
        "kind": "confirm",
        "title": f"Change the source to: {leg.source}",
        "lines": [
            "Change it by hand, mind hot parts and beams, and close the covers again.",
            f"Yes: {leg.source} is in place. No: the run ends and nothing moves.",
        ],
        "source": leg.source,
    }
    # Never answered for an absent person: whether a lamp was changed is not a matter of consent.
    return (Event("question-asked", question),)


def _within(setup: Setup, position_m: float) -> float:
    low_m, high_m = setup.facts.travel_m
    return min(max(position_m, low_m), high_m)


def _limited(distance_m: float, most_m: float) -> float:
    return min(max(distance_m, -most_m), most_m)


def _move(setup: Setup, state: RunState, target_m: float, role: str, why: str) -> Event:
    """The next hop towards ``target_m``: no command asks for more than the longest move."""
    assert state.position_m is not None
    distance_m = target_m - state.position_m
    hop_m = _limited(distance_m, setup.facts.longest_move_m)
    arrives = abs(distance_m) <= setup.facts.longest_move_m
    body = {
        "target_m": target_m if arrives else state.position_m + hop_m,
        "speed_m_s": setup.facts.speed_m_s,
        "role": role if arrives else "hop",
        "why": why,
    }
    return Event("move-intended", body)


# --- the end -------------------------------------------------------------------------------------


def _move_to_zero(setup: Setup, state: RunState) -> tuple[Event, ...]:
    facts = setup.facts
    if state.at == "zero":
        return (Event("step-done", {}),)
    newest = state.zeros[-2:]
    zero = combine(*newest) if len(newest) == 2 else newest[0]
    low_m, high_m = facts.travel_m
    if not low_m <= zero.zero_m <= high_m:
        return _not_found(setup, state, "the zero lies outside the travel limits")
    before_m = _before_zero_m(setup, state, zero.zero_m)
    if abs(zero.zero_m - before_m) < facts.reversal_allowance_m * (1.0 - 1e-9):
        reason = (
            "the zero lies so near the end of the travel that it cannot be approached from the "
            "right side with the reversal allowance; move the other arm"
        )
        return (Event("step-done", {"passed": False}), _end(setup, state, "rejected", reason))
    if state.at != "approach":
        return (_move(setup, state, before_m, "approach", "to approach the zero from one side"),)
    return (_move(setup, state, zero.zero_m, "zero", "to the zero"),)


def _before_zero_m(setup: Setup, state: RunState, zero_m: float) -> float:
    """Where to come from: at least the reversal allowance away, and as far as the scans came.

    The play that a scan took up before it met the packet is then taken up in the same way here.
    """
    facts = setup.facts
    before_m = zero_m - facts.approach * facts.reversal_allowance_m
    if state.scan_from_m is not None:
        further = min if facts.approach > 0 else max
        before_m = further(before_m, state.scan_from_m)
    return _within(setup, before_m)


def _compare(setup: Setup, state: RunState, step: ProcedureStep) -> tuple[Event, ...]:
    first, second = (state.zero(name) for name in step.scans)
    assert first is not None
    assert second is not None
    assert state.left_at_m is not None
    assert state.left_at_s is not None
    verdict = judge(
        setup.accept,
        opd_per_m=setup.facts.opd_per_m,
        resolution_m=setup.facts.resolution_m,
        first=first,
        second=second,
        left_at_m=state.left_at_m,
        left_at_s=state.left_at_s,
    )
    return (
        Event("judged", asdict(verdict)),
        Event("step-done", {"passed": verdict.accepted}),
    )
