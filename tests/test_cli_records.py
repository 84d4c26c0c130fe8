"""evenarm records: what people and programs get to see of a journal."""

from __future__ import annotations

import json
import math
import sqlite3
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from typer.testing import CliRunner, Result

from bench.cli.records import app
from bench.cli.records_text import WIDTH, _columns, one_run
from bench.journal import finite, open_journal, runs, verify

FIRST, SECOND = "20261201-093000-aaaa", "20261201-100000-bbbb"
HOSTILE = "\x1b[31mNord\x07 <b>\u202e=1+1 北北"


@pytest.fixture
def journal(tmp_path: Path) -> Path:
    path = tmp_path / "journal.sqlite3"
    moment = datetime(2026, 12, 1, 9, 30, tzinfo=UTC)

    def now() -> datetime:
        nonlocal moment
        moment += timedelta(seconds=1)
        return moment

    with open_journal(path, write=True, now=now) as book:
        book.append(
            "run-started",
            {
                "procedure": "path-equalisation",
                "bench_name": HOSTILE,
                "operator": HOSTILE * 20,
                "simulated": True,
            },
            run=FIRST,
            bench_time_s=0.0,
        )
        for part in range(4):
            book.append_readings(
                FIRST,
                "scan-1",
                {
                    "time_s": np.arange(5.0) + part,
                    "signal": np.array([1.0, 2.0, math.nan, 3.0, 4.0]),
                },
                bench_time_s=1.0 + part,
            )
        deep: Any = {"text": HOSTILE}
        for _ in range(40):
            deep = {"inner": [deep], "number": 0.1}
        book.append(
            "located",
            {
                "found": True,
                "zero": {"value": 13218.4012, "unit": "um", "standard_uncertainty": 0.0123},
                "at_wavelength": {"value": 600.0, "unit": "nm"},
                "notices": [{"code": "edge", "message": HOSTILE * 30}],
                "word": "w" * 500,
                "deep": deep,
                "numbers": list(range(60)),
                "nothing": [],
                "strange": {"value": "text", "unit": 7},
                HOSTILE: None,
            },
            run=FIRST,
        )
        book.append(
            "measurement",
            finite(
                {
                    "id": "m-1",
                    "name": "zero",
                    "value": 13218.4012,
                    "unit": "um",
                    "standard_uncertainty": 0.0123,
                    "degrees_of_freedom": math.inf,
                    "instruments": [{"maker": HOSTILE, "serial": "1"}],
                }
            ),
            run=FIRST,
        )
        book.append(
            "run-ended",
            {
                "outcome": "accepted",
                "reason": "",
                "zero": {"value": 13218.4012, "unit": "um", "standard_uncertainty": 0.0123},
                "residual_opd": {"value": 12.3, "unit": "nm", "standard_uncertainty": 4.5},
            },
            run=FIRST,
        )
        book.append("run-started", {"procedure": "path-equalisation"}, run=SECOND)
    return path


def call(*arguments: object) -> Result:
    return CliRunner().invoke(app, [str(argument) for argument in arguments])


def fits(result: Result) -> None:
    """Nothing for people is wider than the terminal or able to move its cursor."""
    for line in result.stdout.splitlines():
        assert _columns(line) <= WIDTH, line
        assert line.isprintable(), line


def test_list_names_the_newest_first(journal: Path) -> None:
    result = call("list", "--journal", journal)
    assert result.exit_code == 0
    fits(result)
    assert result.stdout.index(SECOND) < result.stdout.index(FIRST)
    assert f"{FIRST}  2026-12-01 09:30:02  accepted  zero 13.218 401(12) mm" in result.stdout
    assert f"{SECOND}  2026-12-01 09:30:10  open" in result.stdout
    assert verify(journal).head[:16] in result.stdout
    assert result.stderr == ""


def test_list_keeps_to_its_limit(journal: Path) -> None:
    result = call("list", "--limit", 1, "--journal", journal)
    assert FIRST not in result.stdout
    assert "1 older" in result.stdout
    document = json.loads(call("list", "-n", 1, "--json", "--journal", journal).stdout)
    assert [run["run"] for run in document["runs"]] == [SECOND]
    assert (document["schema"], document["count"], document["entries"]) == (
        "evenarm.records/1",
        2,
        9,
    )
    assert document["head"] == verify(journal).head
    assert call("list", "--limit", 0, "--journal", journal).exit_code == 2


@pytest.mark.parametrize("wanted", [FIRST, "20261201-09"])
def test_show_a_run(journal: Path, wanted: str) -> None:
    result = call("show", wanted, "--journal", journal)
    assert result.exit_code == 0
    assert all(line.isprintable() for line in result.stdout.splitlines())
    for said in (
        "accepted",
        "12.3(4.5) nm",
        "m-1  zero  13.218 401(12) mm",
        "scan scan-1: 20 rows in 4 blocks",
        "(simulated)",
    ):
        assert said in result.stdout
    document = json.loads(call("show", wanted, "--json", "--journal", journal).stdout)
    assert document["record"] == "run"
    assert [entry["seq"] for entry in document["entries"]] == list(range(1, 9))
    assert document["measurements"][0]["value"] == 13218.4012
    assert document["run"]["residual_opd"]["standard_uncertainty"] == 4.5


def test_show_a_measurement(journal: Path) -> None:
    result = call("show", "m-1", "--journal", journal)
    assert result.exit_code == 0
    fits(result)
    assert "13.218 401(12) mm" in result.stdout
    assert "degrees_of_freedom: not known" in result.stdout
    document = json.loads(call("show", "m-1", "--json", "--journal", journal).stdout)
    assert (document["record"], document["measurement"]["seq"]) == ("measurement", 7)


def test_show_an_entry(journal: Path) -> None:
    result = call("show", "6", "--journal", journal)
    assert result.exit_code == 0
    fits(result)
    for said in ("zero: 13 218.401(12) um", "at_wavelength: 600 nm", "found: yes", "nothing: none"):
        assert said in result.stdout
    assert "w" * 500 in "".join(line.strip() for line in result.stdout.splitlines())
    document = json.loads(call("show", "#6", "--json", "--journal", journal).stdout)
    assert document["entry"]["body"]["word"] == "w" * 500
    assert document["entry"]["kind"] == "located"


def test_show_readings(journal: Path) -> None:
    result = call("show", "2", "--journal", journal)
    fits(result)
    assert "time_s: 0 to 4" in result.stdout
    assert "signal: 1 to 4" in result.stdout


def test_show_what_is_not_there(journal: Path) -> None:
    result = call("show", "nothing", "--journal", journal)
    assert result.exit_code == 2
    assert result.stdout == ""
    assert "no record nothing" in result.stderr
    result = call("show", "20261201", "--json", "--journal", journal)
    assert result.exit_code == 2
    assert json.loads(result.stdout)["what"] == "2 runs begin with 20261201"


def test_verify_an_intact_journal(journal: Path) -> None:
    result = call("verify", "--json", "--journal", journal)
    assert result.exit_code == 0
    head = verify(journal).head
    assert json.loads(result.stdout) == {
        "schema": "evenarm.verify/1",
        "entries": 9,
        "intact": True,
        "head": head,
        "problems": [],
    }
    text = call("verify", "--journal", f"sqlite:///{journal}", "--head", head[:16])
    assert text.exit_code == 0
    fits(text)
    assert head[:16] in text.stdout
    assert text.stderr == ""


def test_verify_says_what_does_not_hold(journal: Path) -> None:
    result = call("verify", "--head", "0" * 16, "--journal", journal)
    assert result.exit_code == 1
    assert "noted head 0000000000000000" in result.stdout
    database = sqlite3.connect(journal)
    database.execute("DROP TRIGGER entries_no_update")
    database.execute("UPDATE entries SET time_utc = '\x1b[31m'")
    database.commit()
    database.close()
    result = call("verify", "--journal", journal)
    assert result.exit_code == 1
    fits(result)
    assert "intact       NO" in result.stdout
    assert "entry 1: its content does not agree with its hash" in result.stdout
    document = json.loads(call("verify", "--json", "--journal", journal).stdout)
    assert (document["intact"], document["entries"], len(document["problems"])) == (False, 9, 10)
    result = call("show", "1", "--json", "--journal", journal)
    assert result.exit_code == 1
    assert "entry 1" in json.loads(result.stdout)["why"]


def test_progress_of_a_long_check_goes_to_standard_error(
    journal: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("bench.cli.records._PROGRESS_FROM", 5)
    result = call("verify", "--json", "--journal", journal)
    assert result.stderr == "checked 9 of 9 entries\n"
    assert json.loads(result.stdout)["intact"] is True


@pytest.mark.parametrize("command", [("list",), ("show", "1"), ("verify",)])
def test_no_journal_is_bad_input(tmp_path: Path, command: tuple[str, ...]) -> None:
    (tmp_path / "text").write_text("no journal\n" * 100)
    (tmp_path / "empty").write_text("")
    for name in ("none", ".", "text", "empty", "text/below", "sqlite://", "postgresql://h/d"):
        url = name if ":" in name else str(tmp_path / name)
        result = call(*command, "--journal", url)
        assert result.exit_code == 2, name
        assert result.stdout == ""
        assert "mend: " in result.stderr
        assert len(result.stderr.splitlines()) <= 6
        result = call(*command, "--json", "--journal", url)
        assert json.loads(result.stdout)["schema"] == "evenarm.error/1"


def test_the_journal_of_a_bench_is_found_through_its_description(
    journal: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    asked = []

    class Bench:
        records_url = f"sqlite:///{journal}"

    def open_bench(option: Path | None) -> Bench:
        asked.append(option)
        return Bench()

    monkeypatch.setattr("bench.cli.benchfile.open_bench", open_bench)
    assert json.loads(call("verify", "--json").stdout)["entries"] == 9
    assert json.loads(call("list", "--json", "--bench", "b.toml").stdout)["entries"] == 9
    assert asked == [None, Path("b.toml")]


def test_an_empty_journal_is_no_error(tmp_path: Path) -> None:
    open_journal(tmp_path / "j", write=True).close()
    assert "No runs yet" in call("list", "--journal", tmp_path / "j").stdout
    assert json.loads(call("verify", "--json", "--journal", tmp_path / "j").stdout) == {
        "schema": "evenarm.verify/1",
        "entries": 0,
        "intact": True,
        "head": "0" * 64,
        "problems": [],
    }


@pytest.fixture
def answered(tmp_path: Path) -> Path:
    path = tmp_path / "answered.sqlite3"
    with open_journal(path, write=True) as book:
        for run, by in ((FIRST, "Kim"), (SECOND, "nobody: unattended, started by root")):
            book.append("run-started", {"procedure": "p", "operator": "root"}, run=run)
            book.append("question-answered", {"accepted": True, "by": by}, run=run)
            book.append(
                "move-intended",
                {"target_m": 0.012851602, "speed_m_s": 1e-3, "wait_s": 0.05, "why": "x" * 100},
                run=run,
            )
        book.append(
            "measurement",
            {"id": "m-9", "name": "contrast", "value": 0.588, "unit": "1"},
            run=FIRST,
        )
    return path


def test_who_acknowledged_is_named(answered: Path) -> None:
    text = call("list", "--journal", answered).stdout
    assert text.count("by Kim") == 1
    assert text.count("by root") == 1
    listed = json.loads(call("list", "--json", "--journal", answered).stdout)["runs"]
    assert [run["acknowledged_by"] for run in listed] == ["", "Kim"]
    assert "acknowledged by Kim" in call("show", FIRST, "--journal", answered).stdout


def test_entries_are_in_mm_and_whole_where_no_terminal_cuts_them(answered: Path) -> None:
    text = call("show", FIRST, "--journal", answered).stdout
    line = next(line for line in text.splitlines() if "move-intended" in line)
    assert "target 12.851602 mm, " in line
    assert "speed 1 mm/s, " in line
    assert "wait 0.05 s" in line
    assert "x" * 100 in line
    with open_journal(answered, write=False) as book:
        (run, _), head, entries = runs(book), book.head, list(book.entries(run=FIRST))
    for line in one_run(run, (), entries, head):
        assert _columns(line) <= WIDTH


def test_a_number_without_a_unit_has_none(answered: Path) -> None:
    assert "m-9  contrast  0.588\n" in call("show", FIRST, "--journal", answered).stdout


def test_a_head_that_is_too_short_is_a_mistake_of_the_command(answered: Path) -> None:
    result = call("verify", "--head", "fbd2", "--journal", answered)
    assert result.exit_code == 2
    assert "at least 16 hex digits" in result.stderr
    assert "intact" not in result.stdout


def test_verify_of_a_cut_file_does_not_send_to_verify(answered: Path) -> None:
    answered.write_bytes(answered.read_bytes()[:9000])
    result = call("verify", "--journal", answered)
    assert result.exit_code == 1
    assert "records verify" not in result.stderr
    assert "go back to a copy" in result.output
