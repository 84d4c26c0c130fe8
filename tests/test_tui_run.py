"""What the procedure's own view of a run becomes on the screen."""

from __future__ import annotations

from dataclasses import replace
from datetime import UTC, datetime

import pytest
from test_decide import setup
from test_run import bench_folder, session
from test_tui_views import parts

from bench.journal import open_journal
from bench.procedure.board import Board
from bench.procedure.live import LiveView
from bench.procedure.state import Event, Pending, RunState
from bench.tui.scene import Scene
from drivers.contracts import StageState

RUNNING = RunState(phase="running", position_m=7.5e-3, position_known=True)
ENDED = replace(RUNNING, phase="ended", outcome="stopped", reason="stop")


def shown(state: RunState, event: Event | None = None) -> tuple[LiveView, dict[str, str]]:
    """The view of a run in ``state``, whose stage says that it knows where it is; and its parts."""
    board = Board(setup(), bench_name="North table", simulated=True)
    board.stage(StageState(position_m=7.67766e-3, moving=False, known=True, time_s=1.0))
    if event is not None:
        board.event(state, event, "9f3c" * 16)
    view = board.view()
    ended = state.phase == "ended"
    scene = Scene(view, started=state.phase != "new", finished=ended, question=view.question)
    return view, parts(scene, 60)


@pytest.mark.parametrize("known", [True, False])
@pytest.mark.parametrize("at_rest", [True, False])
def test_what_the_stage_says_is_not_more_than_the_run_trusts(known: bool, at_rest: bool) -> None:
    state = replace(ENDED, position_known=known, at_rest=at_rest)
    text = "\n".join(shown(state, Event("run-ended", {}))[1].values())
    firm = known and at_rest
    assert ("stage left at 7.677 66 mm" in text) is firm
    assert ("last reading 7.677 66 mm, not trusted" in text) is not firm
    assert ("NOT TRUSTED" in text) is not firm
    assert ("MAY STILL MOVE" in text) is not at_rest
    assert "journal head 9f3c9f3c9f3c9f3c" in text


def test_before_a_run_nothing_is_mistrusted() -> None:
    _, text = shown(RunState())
    assert "stage    7.677 66 mm" in text["bench"]


def test_no_share_done_is_shown_while_a_packet_is_located() -> None:
    begun = Event("scan-intended", {"name": "leg 1", "source": "white", "expected_time_s": 10.0})
    # Of such an intent the board keeps when it began and how long it may take.
    sweep = {
        "mode": "sweep",
        "start_m": 1e-3,
        "stop_m": 2e-3,
        "source": "white",
        "expected_time_s": 10.0,
    }
    scanning, text = shown(replace(RUNNING, pending=Pending("scan", sweep)), begun)
    assert scanning.progress is not None
    assert " %" in text["bench"]
    locating, text = shown(replace(RUNNING, pending=Pending("locate", {})), begun)
    assert locating.progress is None
    assert " %" not in text["bench"]


def test_a_coarse_packet_is_told_from_none() -> None:
    event = Event("step-done", {})
    assert "expected" in shown(RUNNING, event)[1]["zero"]
    assert "roughly located" in shown(replace(RUNNING, findings={"found": True}), event)[1]["zero"]


def test_a_bench_in_use_is_told_whole(tmp_path) -> None:
    run = session(bench_folder(tmp_path), 101)
    held = open_journal(
        run.spec.records_url, write=True, who="Ada", now=lambda: datetime(2024, 5, 6, tzinfo=UTC)
    )
    try:
        run.perform()
    finally:
        held.close()
    view = run.view()
    told = parts(Scene(view, started=True, finished=True), 60)["next"]
    words = told.replace("\n", " ").replace(" ", "")
    assert run.error is not None
    assert len(run.error.lines()) == len(view.error_lines) == 4
    for line in run.error.lines():
        assert line.replace(" ", "") in words
    assert "Next:" not in told  # how to mend it stands there already
