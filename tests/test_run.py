"""The main job end to end on the simulated bench, judged against the bench's hidden truth."""

from __future__ import annotations

import json
import shutil
from datetime import UTC, datetime
from pathlib import Path

import pytest

from bench.errors import UsageError
from bench.journal import open_journal, verify
from bench.procedure.session import RunOptions, RunSession
from bench.procedure.text import find_procedure
from bench.spec import load_bench
from drivers import registry

SHIPPED = Path(__file__).parent.parent / "bench" / "shipped" / "default"


def bench_folder(tmp_path: Path, **replaced: str) -> Path:
    """A copy of the shipped bench; ``bench`` and ``world`` are texts to add to its files."""
    folder = tmp_path / "table"
    shutil.copytree(SHIPPED, folder)
    for name in ("bench", "world"):
        path = folder / f"{name}.toml"
        path.write_text(path.read_text(encoding="utf-8") + replaced.get(name, ""), encoding="utf-8")
    return folder


def session(folder: Path, seed: int, **options: object) -> RunSession:
    spec = load_bench(
        folder / "bench.toml",
        declared=registry.declared,
        known_drivers=registry.names,
        seed=seed,
    )
    values = {"operator": "Kim", "unattended": True, **options}
    return RunSession(
        spec,
        find_procedure("path-equalisation", folder),
        RunOptions(**values),  # type: ignore[arg-type]
        now=lambda: datetime.now(UTC),
        run_id=f"run-{seed}",
    )


@pytest.mark.parametrize("seed", range(101, 107))
def test_the_zero_is_found_and_the_stage_left_there(tmp_path, seed):
    run = session(bench_folder(tmp_path), seed)
    state = run.run()
    assert state.outcome == "accepted", state.reason
    assert state.verdict is not None
    assert run.truth is not None
    off_m = state.verdict["zero_m"] - run.truth.zero_m
    assert abs(off_m) < 5.0 * state.verdict["zero_u_m"]
    true_residual_m = run.truth.residual_opd_m
    assert abs(true_residual_m) < 200e-9
    claimed_m, u_m = state.verdict["residual_opd_m"], state.verdict["residual_u_m"]
    assert abs(true_residual_m - claimed_m) < 5.0 * u_m
    found = verify(run.spec.records_url)
    assert found.intact
    assert found.head == run.view().head


def test_nobody_is_said_to_have_read_what_nobody_was_asked(tmp_path):
    folder = bench_folder(tmp_path)
    for seed, acknowledged_by, by in (
        (3, None, "nobody: unattended, started by Kim"),
        (4, "Ada", "Ada"),
    ):
        run = session(folder, seed, acknowledged_by=acknowledged_by)
        assert run.setup.by == by


def test_the_same_seed_gives_the_same_readings(tmp_path):
    kept = []
    for name in ("one", "two"):
        folder = bench_folder(tmp_path / name)
        run = session(folder, 5)
        run.run()
        with open_journal(run.spec.records_url, write=False) as journal:
            kept.append([e.body["block"] for e in journal.entries(kinds=("readings",))])
    assert kept[0] == kept[1]
    assert len(kept[0]) > 10


def test_every_scan_can_be_located_again_from_the_journal(tmp_path):
    """What is in the record is enough to come to the same zero without the bench."""
    from bench.procedure.locating import locate_readings
    from bench.procedure.scanning import Readings

    run = session(bench_folder(tmp_path), 7)
    run.run()
    with open_journal(run.spec.records_url, write=False) as journal:
        rows = [e.body for e in journal.entries(kinds=("located",)) if e.body["found"]]
        assert len(rows) >= 2
        body = rows[-1]
        columns = journal.readings("run-7", f"{body['scan']} as located")
    source = next(s for s in run.spec.sources if s.name == body["source"])
    again = locate_readings(run.spec, source, Readings(**columns))
    assert again.zero is not None
    assert again.zero.value == pytest.approx(body["zero_m"], abs=1e-15)


FAULT = """
[[fault]]
kind = "{kind}"
at = "{at}"
lasts = "{lasts}"
"""


@pytest.mark.parametrize(
    ("kind", "says"),
    [
        ("detector silent", "detector"),
        ("stage stalled", "stage"),
        ("unplugged", ""),
    ],
)
def test_a_device_that_fails_ends_the_run_with_its_name_and_a_known_state(tmp_path, kind, says):
    folder = bench_folder(tmp_path, world=FAULT.format(kind=kind, at="25 s", lasts="1000 s"))
    run = session(folder, 3)
    state = run.run()
    assert state.outcome == "fault", state.reason
    assert says in state.reason
    found = verify(run.spec.records_url)
    assert found.intact
    with open_journal(run.spec.records_url, write=False) as journal:
        assert [e.kind for e in journal.entries()][-1] == "run-ended"


def test_no_light_is_not_found_and_says_what_was_seen(tmp_path):
    folder = bench_folder(tmp_path, world=FAULT.format(kind="lamp out", at="0 s", lasts="9000 s"))
    state = session(folder, 3).run()
    assert state.outcome == "not found"
    assert "is the lamp on" in state.reason
    assert state.scans_run == 1
    assert state.position_known


def test_a_stop_before_the_first_move_moves_nothing(tmp_path):
    run = session(bench_folder(tmp_path), 3)
    run.stop("key")
    state = run.run()
    assert state.outcome == "stopped"
    with open_journal(run.spec.records_url, write=False) as journal:
        kinds = [entry.kind for entry in journal.entries()]
    assert "move-intended" not in kinds
    assert kinds[-3:] == ["stop-requested", "stopped", "run-ended"]


def test_a_stop_in_mid_scan_brings_the_stage_to_rest_and_says_where(tmp_path):
    run = session(bench_folder(tmp_path), 3)
    board = run._board
    seen = []
    keep = board.readings

    def stop_soon(part):
        keep(part)
        seen.append(part)
        if len(seen) == 5:
            run.stop("key")

    board.readings = stop_soon  # type: ignore[method-assign]
    state = run.run()
    assert state.outcome == "stopped"
    assert state.position_known
    view = run.view()
    assert not view.stage_moving
    assert view.stage_position_m == pytest.approx(state.position_m, abs=1e-9)
    with open_journal(run.spec.records_url, write=False) as journal:
        kinds = [entry.kind for entry in journal.entries()]
    assert kinds[-3:] == ["stop-requested", "stopped", "run-ended"]


def test_after_an_interrupted_move_the_next_run_asks_first(tmp_path):
    folder = bench_folder(tmp_path)
    first = session(folder, 3)
    with open_journal(first.spec.records_url, write=True) as journal:
        journal.append("run-started", {"procedure": "path-equalisation"}, run="run-0")
        journal.append("scan-intended", {"scan": "scan-1"}, run="run-0")
    with pytest.raises(UsageError, match="position is not known"):
        first.run()
    with open_journal(first.spec.records_url, write=False) as journal:
        assert journal.head.entries == 2  # nothing was done, so nothing was written

    attended = session(folder, 3, unattended=False)
    attended.start()
    while attended.view().question is None:
        assert not attended.finished, attended.error
    view = attended.view()
    assert view.question is not None
    assert view.question.title == "The stage position is not known"
    assert "run-0" in view.question.lines[0]
    assert not view.stage_moving
    attended.answer(view.question.id, False)
    attended.close()
    assert attended.view().outcome == "stopped"

    answered_for = session(folder, 4, acknowledged_by="Ada")
    state = answered_for.run()
    assert state.outcome == "accepted"
    with open_journal(first.spec.records_url, write=False) as journal:
        entries = list(journal.entries())
        kinds = [entry.kind for entry in entries if entry.run == "run-4"]
        assert kinds.index("home-done") < kinds.index("move-intended")
        ended = [entry for entry in entries if entry.kind == "run-ended" and entry.run == "run-0"]
        assert "interrupted" in ended[0].body["reason"]
    assert session(folder, 5).run().outcome == "accepted"


def test_a_second_writer_is_told_who_holds_the_journal(tmp_path):
    from bench.errors import JournalHeld

    folder = bench_folder(tmp_path)
    run = session(folder, 3)
    with (
        open_journal(run.spec.records_url, write=True, who="Ada"),
        pytest.raises(JournalHeld, match="Ada"),
    ):
        run.run()


def test_no_limits_no_run(tmp_path):
    folder = bench_folder(tmp_path)
    path = folder / "bench.toml"
    text = path.read_text(encoding="utf-8")
    lines = [line for line in text.splitlines() if not line.startswith("travel")]
    path.write_text("\n".join(lines), encoding="utf-8")
    with pytest.raises(UsageError, match="nothing may move"):
        session(folder, 3)


def test_an_attended_run_asks_and_records_the_names(tmp_path):
    folder = bench_folder(tmp_path)
    run = session(folder, 3, unattended=False)
    run.start()
    asked = []
    while not run.finished:
        question = run.view().question
        if question is not None and question.id not in asked:
            asked.append(question.id)
            run.answer(question.id, "Kim\x1b[2J Lee" if question.kind == "acknowledge" else True)
        run._ended.wait(0.01)
    run.close()
    assert run.error is None
    assert run.view().outcome == "accepted"
    with open_journal(run.spec.records_url, write=False) as journal:
        answers = [e.body for e in journal.entries(kinds=("question-answered",))]
    assert answers[0]["by"] == "Kim[2J Lee"
    json.dumps(answers)
