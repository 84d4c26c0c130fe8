"""Bad input of every kind: a one-screen message, exit status 2, no traceback, nothing written."""

from __future__ import annotations

import json
import shutil
from pathlib import Path

import pytest
from typer.testing import CliRunner

from bench.cli import app

SHIPPED = Path(__file__).parent.parent / "bench" / "shipped" / "default"


@pytest.fixture
def table(tmp_path, monkeypatch):
    shutil.copytree(SHIPPED, tmp_path / "table")
    monkeypatch.chdir(tmp_path / "table")
    return tmp_path / "table"


def refused(*words: str) -> str:
    """What the command says; asserts that it is a message for a person."""
    result = CliRunner().invoke(app, list(words))
    assert result.exit_code == 2, result.output
    assert result.exception is None or isinstance(result.exception, SystemExit)
    said = result.stderr
    assert "Traceback" not in said
    assert 1 <= len(said.splitlines()) <= 24
    assert all(len(line) <= 700 for line in said.splitlines())
    return said


def edited(table: Path, old: str, new: str, name: str = "bench.toml") -> None:
    path = table / name
    text = path.read_text(encoding="utf-8")
    assert old in text
    path.write_text(text.replace(old, new, 1), encoding="utf-8")


FILES: dict[str, bytes | None] = {
    "missing": None,
    "empty": b"",
    "binary": bytes(range(256)) * 20,
    "not utf-8": "name = 'Käfig'".encode("latin-1"),
}


@pytest.mark.parametrize("kind", [*FILES, "directory"])
@pytest.mark.parametrize("command", ["check", "plan", "run"])
def test_a_bench_file_that_is_none(table, tmp_path, kind, command):
    path = tmp_path / "other.toml"
    if kind == "directory":
        path.mkdir()
    elif FILES[kind] is not None:
        path.write_bytes(FILES[kind])
    words = [command, "--bench", str(path)]
    if command == "run":
        words[1:1] = ["path-equalisation", "--unattended"]
    said = refused(*words)
    assert "other.toml" in said
    assert not (tmp_path / "logs").exists()


@pytest.mark.parametrize(
    ("old", "new", "says"),
    [
        ('speed = "1 mm/s"', 'speed = "1 kg/s"', "speed"),
        ('speed = "1 mm/s"', "speed = 1", "speed"),
        ('speed = "1 mm/s"', 'speed = "nan mm/s"', "speed"),
        ('speed = "1 mm/s"', 'sped = "1 mm/s"', "'speed'"),
        ("path_factor = 2", "path_factor = 0", "path_factor"),
        ("path_factor = 2", "path_factor = nan", "path_factor"),
        ('travel = ["0 mm", "25 mm"]', 'travel = ["25 mm", "0 mm"]', "travel"),
        ('zero = "12.5 mm"', 'zero = "125 mm"', "zero"),
        ('driver = "simulated"', 'driver = "simulatd"', "simulated"),
    ],
)
@pytest.mark.parametrize("command", ["check", "plan", "run"])
def test_a_bench_that_cannot_be(table, command, old, new, says):
    edited(table, old, new)
    words = [command, "path-equalisation", "--unattended"] if command == "run" else [command]
    said = refused(*words)
    assert says in said
    assert "bench.toml" in said
    assert not (table / "logs" / "journal.sqlite3").exists()


def test_no_limits_no_motion(table):
    edited(table, 'travel = ["0 mm", "25 mm"]', "")
    assert "travel" in refused("run", "path-equalisation", "--unattended")
    # Describing such a bench is allowed; the check says that nothing can move on it.
    result = CliRunner().invoke(app, ["check"])
    assert result.exit_code == 1
    assert "travel" in result.output


def test_errors_as_json_too(table):
    edited(table, "path_factor = 2", "path_factor = 0")
    result = CliRunner().invoke(app, ["check", "--json"])
    assert result.exit_code == 2
    document = json.loads(result.stdout)
    assert document["schema"] == "evenarm.error/1"
    assert any("path_factor" in line for line in document["problems"])


def test_the_world_is_checked_as_well(table):
    edited(table, 'position_noise = "10 nm"', 'position_nois = "10 nm"', "world.toml")
    said = refused("run", "path-equalisation", "--unattended")
    assert "world.toml" in said
    assert "position_noise" in said


@pytest.mark.parametrize("kind", [*FILES, "directory"])
def test_a_scan_file_that_is_none(table, tmp_path, kind):
    path = tmp_path / "scan.csv"
    if kind == "directory":
        path.mkdir()
    elif FILES[kind] is not None:
        path.write_bytes(FILES[kind])
    assert "scan.csv" in refused("fit", str(path))


def test_an_unknown_procedure_names_the_nearest(table):
    assert "path-equalisation" in refused("run", "path-equalization", "--unattended")


def test_questions_need_somebody(table):
    assert "--unattended" in refused("run", "path-equalisation")


@pytest.mark.parametrize("pace", ["0", "-1", "nan", "inf", "slow", ""])
def test_a_pace_that_cannot_be(table, pace):
    said = refused("run", "path-equalisation", "--unattended", f"--pace={pace}")
    assert "pace" in said


def test_the_screen_needs_a_terminal(table):
    assert "terminal" in refused()


def test_a_journal_that_is_none(table, tmp_path):
    (tmp_path / "journal.sqlite3").write_bytes(b"hello" * 500)
    edited(table, "sqlite:///logs/journal.sqlite3", f"sqlite:///{tmp_path}/journal.sqlite3")
    said = refused("run", "path-equalisation", "--unattended")
    assert "journal.sqlite3" in said
    assert (tmp_path / "journal.sqlite3").read_bytes() == b"hello" * 500
