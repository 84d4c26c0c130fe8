"""A run as pure functions: what follows from what, in every state."""

from __future__ import annotations

import dataclasses
import json

import pytest

from bench.planning import Belief
from bench.planning.model import BenchFacts, SourceFacts
from bench.procedure import inputs as said
from bench.procedure.decide import MOST_RETURNS, decide
from bench.procedure.state import Event, RunState, Setup, evolve
from bench.procedure.text import find_procedure
from bench.spec.model import AcceptSpec


def source(name: str, fwhm_m: float, signal: float) -> SourceFacts:
    band = (1 / 600e-9 - 0.25 / fwhm_m, 1 / 600e-9 + 0.25 / fwhm_m)
    return SourceFacts(name, 600e-9, band, fwhm_m, signal, 20.0, 0.0)


FACTS = BenchFacts(
    opd_per_m=2.00054,
    travel_m=(0.0, 25e-3),
    speed_m_s=1e-3,
    acceleration_m_s2=1e-2,
    resolution_m=20e-9,
    settle_s=0.05,
    approach=1,
    reversal_allowance_m=20e-6,
    longest_move_m=5e-3,
    rate_hz=1000.0,
    integration_s=2e-4,
    noise=5e-3,
    accept_residual_opd_m=200e-9,
    glass_shift_m=0.0,
    sources=(source("white", 5.3e-6, 1.0), source("filter 2 nm", 159e-6, 0.3)),
)


def setup(**changes) -> Setup:
    values = {
        "run": "r1",
        "procedure": find_procedure("path-equalisation", None),
        "facts": FACTS,
        "prior": Belief.uniform(12.5e-3, 5e-3),
        "accept": AcceptSpec(200e-9, 100e-9, 2.0),
        "caution_lines": ("mind the stage",),
        "source_change": "simulated",
        "signal_unit": "V",
        "at_wavelength_m": 600e-9,
        "unattended": False,
        "by": "Kim",
    }
    return Setup(**{**values, **changes})


class World:
    """Answers intents as an ideal bench would: the packet is seen wherever a scan covers it."""

    def __init__(
        self, made: Setup, zero_m: float = 13.2e-3, *, blind: frozenset[str] = frozenset()
    ):
        self.setup, self.zero_m, self.blind = made, zero_m, blind
        self.state = RunState()
        self.events: list[Event] = []
        self.time_s = 0.0
        self.known = True

    def feed(self, happened: said.Input) -> tuple[Event, ...]:
        events = decide(self.setup, self.state, happened)
        for event in events:
            json.dumps(dict(event.body), allow_nan=False)
            self.state = evolve(self.setup, self.state, event)
        self.events += events
        return events

    def begin(self, interrupted: str = "", known: bool = True) -> None:
        body = {"position_m": 2e-3 if known else None, "position_known": known}
        self.feed(said.Begin(body, interrupted, 0.0))

    def answer(self) -> said.Input:
        pending = self.state.pending
        self.time_s += 1.0
        if pending is None:
            return said.Continue(self.time_s)
        body = pending.body
        match pending.kind:
            case "question":
                return said.Answered(True, "Kim", self.time_s)
            case "source":
                return said.SourceReady(self.time_s)
            case "home":
                return said.HomeEnded(0.0, self.time_s)
            case "move":
                return said.MoveEnded(body["target_m"], self.time_s)
            case "scan":
                return said.ScanEnded(
                    body["end_m"], self.read(body), 1000, self.time_s, self.time_s
                )
            case _:
                return self.located(body["name"])

    def read(self, body) -> tuple[float, float]:
        return tuple(sorted((body["start_m"], body["stop_m"])))

    def located(self, name: str) -> said.Input:
        leg = self.state.leg
        low, high = self.state.pending.body["read_m"]
        if name in self.blind or not low <= self.zero_m <= high:
            return said.LocateEnded({"found": False, "reason": "plain noise"}, self.time_s)
        u_m = 1e-6 if leg.purpose == "search" else 4e-9
        body = {"found": True, "reason": "", "zero_m": self.zero_m, "zero_u_m": u_m}
        body |= {"zero_time_s": self.time_s, "contrast": {"value": 0.5, "unit": "1"}}
        return said.LocateEnded(body, self.time_s)

    def run(self, most: int = 500) -> RunState:
        for _ in range(most):
            if self.state.phase == "ended":
                return self.state
            self.feed(self.answer())
        raise AssertionError("the run does not end")

    def kinds(self) -> list[str]:
        return [event.kind for event in self.events]


def test_a_run_from_cautions_to_acceptance():
    world = World(setup())
    world.begin()
    state = world.run()
    assert (state.outcome, state.failed_steps) == ("accepted", frozenset())
    assert state.left_at_m == pytest.approx(13.2e-3, abs=1e-12)
    assert len(state.measurements) == 4
    asked = [e.body["kind"] for e in world.events if e.kind == "question-asked"]
    assert asked == ["acknowledge", "confirm"]
    end = world.events[-1].body
    assert end["zero"]["value"] == pytest.approx(13200.0, abs=1e-6)
    assert end["residual_opd"]["unit"] == "nm"


def test_every_position_that_counts_is_reached_from_the_approach_side():
    for approach in (1, -1):
        world = World(setup(facts=dataclasses.replace(FACTS, approach=approach)))
        world.begin()
        world.run()
        position = 2e-3
        for event in world.events:
            if event.kind == "move-done":
                moved = event.body["position_m"] - position
                position = event.body["position_m"]
                if event.body["role"] in {"run-up", "zero"}:
                    assert moved * approach >= 20e-6 - 1e-12
            elif event.kind == "scan-intended":
                assert (event.body["stop_m"] - event.body["start_m"]) * approach > 0
                assert (event.body["end_m"] - event.body["stop_m"]) * approach >= -1e-12
            elif event.kind == "scan-done":
                position = event.body["position_m"]


def test_no_command_asks_for_more_than_the_longest_move_or_leaves_the_limits():
    facts = dataclasses.replace(FACTS, longest_move_m=0.7e-3)
    world = World(setup(facts=facts))
    world.begin()
    assert world.run().outcome == "accepted"
    position = 2e-3
    for event in world.events:
        if event.kind in {"move-intended", "scan-intended"}:
            target = event.body.get("target_m", event.body.get("end_m"))
            assert abs(target - position) <= 0.7e-3 + 1e-12
            assert 0.0 <= target <= 25e-3
        if event.kind in {"move-done", "scan-done"}:
            position = event.body["position_m"]


def test_an_intent_always_comes_before_its_outcome_and_only_one_is_open():
    world = World(setup())
    world.begin()
    world.run()
    open_intent = None
    pairs = {
        "move-intended": "move-done",
        "scan-intended": "scan-done",
        "source-intended": "source-selected",
        "question-asked": "question-answered",
    }
    for kind in world.kinds():
        if kind in pairs:
            assert open_intent is None
            open_intent = kind
        elif kind in pairs.values():
            assert open_intent is not None
            assert pairs[open_intent] == kind
            open_intent = None
    assert open_intent is None


def test_the_state_is_the_fold_of_what_was_written():
    world = World(setup())
    world.begin()
    world.run()
    state = RunState()
    for event in world.events:
        copied = Event(event.kind, json.loads(json.dumps(dict(event.body))))
        state = evolve(world.setup, state, copied)
    for field in dataclasses.fields(RunState):
        if field.name != "belief":
            assert getattr(state, field.name) == getattr(world.state, field.name), field.name
    assert state.belief.interval(0.95) == world.state.belief.interval(0.95)


def test_a_packet_that_is_nowhere_is_not_found():
    world = World(setup(), zero_m=1e-3)
    world.begin()
    state = world.run()
    assert state.outcome == "not found"
    assert "plain noise" in state.reason
    assert state.zeros == ()


def test_a_first_scan_that_misses_goes_back_to_the_search_and_only_so_often():
    world = World(setup(), blind=frozenset({"first"}))
    world.begin()
    state = world.run()
    assert state.outcome == "not found"
    assert 1 <= state.went_back <= MOST_RETURNS
    assert "first" in state.reason
    assert state.failed_steps == {state.step}  # what was gone back over is open again


def test_a_second_scan_that_misses_rejects():
    world = World(setup(), blind=frozenset({"second"}))
    world.begin()
    state = world.run()
    assert state.outcome == "rejected"
    assert "saw no packet: plain noise" in state.reason
    assert state.failed_steps == {4}


def test_an_unknown_position_is_asked_about_before_anything_moves():
    for interrupted, known in (("Run r0 began to move the stage.", True), ("", False)):
        world = World(setup())
        world.begin(interrupted, known=known and not interrupted)
        world.feed(world.answer())
        assert world.state.pending.kind == "question"
        assert "not known" in world.state.pending.body["title"]
        told = interrupted or "The stage does not know where it is."
        assert world.state.pending.body["lines"][0] == told
        world.feed(world.answer())
        world.feed(world.answer())
        assert world.state.pending.kind == "home"
        assert not {"move-intended", "scan-intended"} & set(world.kinds())
        assert world.run().outcome == "accepted"


def test_no_to_a_question_ends_the_run_with_nothing_moved():
    world = World(setup())
    world.begin("Run r0 began to move the stage.", known=False)
    world.feed(world.answer())
    world.feed(said.Answered(False, "Kim", 1.0))
    assert world.run().outcome == "stopped"
    assert not [kind for kind in world.kinds() if kind.endswith("-intended")]


def test_a_stop_that_nothing_confirms_is_a_fault_and_says_what_to_do():
    world = World(setup())
    world.begin()
    world.feed(said.StopAsked("Kim", "key", 2.0))
    world.feed(said.Stopped(None, False, False, "key", 12.0))
    assert world.state.outcome == "fault"
    assert "power switch" in world.state.reason
    assert not world.state.at_rest


def test_an_unconfirmed_rest_after_a_failure_is_said():
    for at_rest in (True, False):
        world = World(setup())
        world.begin()
        world.feed(said.Failed("silence", "stage", "look", None, False, at_rest, 2.0))
        assert ("power switch" in world.state.reason) is not at_rest
        assert world.state.at_rest is at_rest


def test_a_source_changed_by_hand_is_given_its_time_to_warm_up():
    world = World(setup(source_change="hand"))
    world.begin()
    world.run()
    kinds = world.kinds()
    for place, event in enumerate(world.events):
        if event.kind == "question-answered" and event.body["id"].startswith("source"):
            assert kinds[place + 1 : place + 3] == ["source-intended", "source-selected"]
    ids = [e.body["id"] for e in world.events if e.kind == "question-asked"]
    assert len(ids) == len(set(ids))


def test_the_zero_is_approached_from_at_least_as_far_as_the_scans_were():
    """Play larger than the allowance is taken up in the same way by scans and approach."""
    world = World(setup(facts=dataclasses.replace(FACTS, reversal_allowance_m=4e-6)))
    world.begin()
    assert world.run().outcome == "accepted"
    done = [e.body for e in world.events if e.kind == "move-done"]
    newest = [body for body in done if body["role"] == "overshoot"][-1]
    approach = next(body for body in done if body["role"] == "approach")
    assert approach["position_m"] <= newest["position_m"]
    assert world.zero_m - approach["position_m"] > 8e-6


def test_a_zero_that_cannot_be_approached_from_its_side_is_rejected():
    facts = dataclasses.replace(FACTS, travel_m=(13.19e-3, 25e-3))
    world = World(setup(facts=facts, prior=Belief.uniform(14e-3, 1e-3)))
    world.begin()
    state = world.run()
    assert state.outcome == "rejected"
    assert "near the end of the travel" in state.reason
    assert state.left_at_m is None


def test_a_scan_that_can_read_nothing_more_is_not_made_for_ever():
    facts = dataclasses.replace(FACTS, travel_m=(0.0, 14e-3))
    world = World(setup(facts=facts, prior=Belief.uniform(13.9e-3, 0.1e-3)), zero_m=13.9999e-3)
    world.read = lambda body: (body["start_m"], min(body["stop_m"], 13.999e-3))
    world.begin()
    state = world.run()
    assert state.outcome == "not found"
    assert state.scans_run < 20


def test_yes_to_another_question_is_no_leave_to_home():
    world = World(setup())
    world.begin()
    world.feed(world.answer())
    assert world.state.pending.body["kind"] == "acknowledge"
    world.feed(world.answer())
    assert not world.state.may_home


def test_glass_widens_the_belief_only_between_wavelengths():
    widths = []
    for other_m in (600e-9, 620e-9):
        coarse = dataclasses.replace(FACTS.sources[1], mean_wavelength_m=other_m)
        facts = dataclasses.replace(FACTS, glass_shift_m=3e-6, sources=(FACTS.sources[0], coarse))
        world = World(setup(facts=facts))
        world.begin()
        while world.state.leg is None or world.state.leg.purpose == "search":
            world.feed(world.answer())
        widths.append(world.state.belief.half_width_m)
    assert widths[0] == pytest.approx(1.96e-6, rel=0.1)
    assert widths[1] == pytest.approx(1.96 * 10**0.5 * 1e-6, rel=0.1)


def test_what_was_not_read_is_not_believed_to_be_empty():
    world = World(setup(), zero_m=20e-3)
    world.read = lambda body: (body["start_m"], body["start_m"] + 1e-7)
    world.begin()
    while world.state.scans_run < 1 or world.state.pending is not None:
        world.feed(world.answer())
    low, high = world.state.belief.interval(0.95)
    assert high - low > 9e-3
    assert world.run().outcome == "not found"


def test_a_scan_that_was_blind_is_no_evidence():
    world = World(setup())
    world.begin()
    while world.state.pending is None or world.state.pending.kind != "locate":
        world.feed(world.answer())
    before = world.state.belief
    world.feed(said.LocateEnded({"found": False, "reason": "in step", "blind": True}, 50.0))
    assert world.state.belief is before
    assert world.state.missed == "in step"


def test_a_stop_does_not_make_an_unknown_position_known():
    for happened in (
        said.Stopped(5e-3, True, True, "key", 2.0),
        said.Failed("silence", "stage", "look", 5e-3, True, True, 2.0),
    ):
        world = World(setup())
        world.begin("Run r0 began to move the stage.", known=False)
        world.feed(happened)
        kept = next(e.body for e in world.events if e.kind in {"stopped", "move-failed"})
        assert kept["position_known"] is False
        assert kept["position_m"] is None


def test_an_unattended_run_asks_nothing_and_says_who_answers():
    world = World(setup(unattended=True, by="Ada"))
    world.begin()
    while world.state.phase != "ended":
        assert world.state.pending is None or world.state.pending.kind != "question"
        world.feed(world.answer())
    answers = [e.body for e in world.events if e.kind == "question-answered"]
    assert {body["by"] for body in answers} == {"Ada"}


def test_a_source_changed_by_hand_is_asked_for_even_unattended():
    for unattended in (False, True):
        world = World(setup(source_change="hand", unattended=unattended))
        world.begin()
        world.run()
        ids = [e.body["id"] for e in world.events if e.kind == "question-asked"]
        assert any(identity.startswith("source ") for identity in ids)
        answered = [e for e in world.events if e.kind == "question-answered"]
        assert all(e.body["by"] == "Kim" for e in answered)


# --- every input in every state ------------------------------------------------------------------

EVERY_INPUT: tuple[said.Input, ...] = (
    said.Begin({"position_m": 1e-3, "position_known": True}, "", 9.0),
    said.Continue(9.0),
    said.Answered(True, "Kim", 9.0),
    said.Answered(False, "Kim", 9.0),
    said.SourceReady(9.0),
    said.HomeEnded(0.0, 9.0),
    said.MoveEnded(1e-3, 9.0),
    said.ScanEnded(1e-3, (1e-3, 2e-3), 10, 9.0, 9.0),
    said.LocateEnded({"found": False, "reason": "none"}, 9.0),
    said.Failed("silence", "detector", "look at it", 1e-3, True, True, 9.0),
    said.Failed("silence", "stage", "look at it", None, False, True, 9.0),
    said.StopAsked("Kim", "key", 9.0),
    said.Stopped(1e-3, True, True, "key", 9.0),
    said.Stopped(None, False, False, "key", 9.0),
)


def states() -> list[tuple[str, Setup, RunState]]:
    """Every state that an accepted run, one with homing and one by hand go through."""
    seen: dict[tuple[str, int, str], tuple[str, Setup, RunState]] = {}
    for name, made, interrupted in (
        ("plain", setup(), ""),
        ("homed", setup(), "Run r0 began to move the stage."),
        ("hand", setup(source_change="hand"), ""),
    ):
        world = World(made)
        seen[(name, -2, "new")] = (f"{name} new", made, world.state)
        world.begin(interrupted, known=not interrupted)
        while world.state.phase != "ended":
            pending = world.state.pending.kind if world.state.pending else "nothing"
            label = f"{name} step {world.state.step} {pending}"
            seen.setdefault((name, world.state.step, pending), (label, made, world.state))
            world.feed(world.answer())
        seen[(name, 99, "ended")] = (f"{name} ended", made, world.state)
    return list(seen.values())


STATES = states()
ANSWERS = {
    "question": said.Answered,
    "source": said.SourceReady,
    "home": said.HomeEnded,
    "move": said.MoveEnded,
    "scan": said.ScanEnded,
    "locate": said.LocateEnded,
}


@pytest.mark.parametrize("made", STATES, ids=[label for label, _, _ in STATES])
def test_every_input_in_every_state_has_a_defined_outcome(made):
    _, made_setup, state = made
    for happened in EVERY_INPUT:
        events = decide(made_setup, state, happened)
        after = state
        for event in events:
            after = evolve(made_setup, after, event)
        if state.phase == "ended":
            assert events == ()
        elif isinstance(happened, said.Stopped):
            assert after.outcome == ("stopped" if happened.at_rest else "fault")
            assert after.pending is None
        elif isinstance(happened, said.Failed):
            assert (after.outcome, after.pending) == ("fault", None)
        elif isinstance(happened, said.StopAsked):
            assert [event.kind for event in events] == ["stop-requested"]
        elif isinstance(happened, said.Begin):
            begins = state.phase == "new"
            assert [event.kind for event in events] == (["run-started"] if begins else [])
        elif isinstance(happened, said.Continue):
            waits = state.phase == "new" or state.pending is not None
            assert (events == ()) is waits
        elif state.pending is None or not isinstance(happened, ANSWERS[state.pending.kind]):
            assert events == ()  # an answer to nothing, or to another question, changes nothing


def test_a_stop_that_is_told_twice_ends_once():
    world = World(setup())
    world.begin()
    for _ in range(12):
        world.feed(world.answer())
    world.feed(said.StopAsked("Kim", "key", 50.0))
    world.feed(said.Stopped(3e-3, True, True, "key", 51.0))
    assert world.feed(said.Stopped(3e-3, True, True, "key", 52.0)) == ()
    assert world.kinds().count("run-ended") == 1
    assert world.events[-1].body["outcome"] == "stopped"
