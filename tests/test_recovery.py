"""What an earlier run left behind: runs without an end, motion without an outcome."""

from __future__ import annotations

import pytest

from bench.journal import Entry
from bench.procedure.recovery import left_open


def entries(*rows: tuple[str, str] | tuple[str, str, dict]) -> list[Entry]:
    made = []
    for seq, (run, kind, *body) in enumerate(rows, 1):
        said = body[0] if body else {}
        made.append(Entry(seq, "2026-12-01T10:00:00.000000Z", kind, run, said, "", ""))
    return made


def test_nothing_is_left_of_a_run_that_ended():
    found = left_open(
        entries(
            ("a", "run-started"),
            ("a", "move-intended"),
            ("a", "move-done"),
            ("a", "run-ended"),
        )
    )
    assert (found.runs, found.why) == ((), "")


@pytest.mark.parametrize("kind", ["move-intended", "scan-intended", "home-intended"])
def test_motion_without_an_outcome_is_not_to_be_trusted(kind):
    found = left_open(
        entries(("a", "run-started"), ("a", "run-ended"), ("b", "run-started"), ("b", kind))
    )
    assert found.runs == ("b",)
    assert "Run b began to move the stage (entry 4" in found.why


def test_a_run_that_died_at_rest_is_open_but_its_position_holds():
    found = left_open(entries(("a", "run-started"), ("a", "move-intended"), ("a", "move-done")))
    assert (found.runs, found.why) == (("a",), "")


@pytest.mark.parametrize("kind", ["move-failed", "stopped"])
@pytest.mark.parametrize("known", [True, False])
def test_an_outcome_says_whether_the_position_is_known(kind, known):
    found = left_open(
        entries(
            ("a", "run-started"),
            ("a", "scan-intended"),
            ("a", kind, {"position_known": known}),
            ("a", "run-ended"),
        )
    )
    assert found.runs == ()
    assert (found.why == "") is known


def test_homing_restores_the_trust():
    found = left_open(
        entries(
            ("a", "run-started"),
            ("a", "scan-intended"),
            ("b", "run-started"),
            ("b", "home-intended"),
            ("b", "home-done"),
        )
    )
    assert (found.runs, found.why) == (("a", "b"), "")
