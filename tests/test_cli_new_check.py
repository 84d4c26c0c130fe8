"""The commands new, check and drivers, as a technician and as a script use them."""

from __future__ import annotations

import dataclasses
import json
import os
import re
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest
from typer.testing import CliRunner, Result

from bench.cli import app
from bench.cli.new import FILES
from drivers import registry
from drivers.registry import Available, LoadFailure


def evenarm(*words: str) -> Result:
    result = CliRunner().invoke(app, list(words))
    if result.exception is not None and not isinstance(result.exception, SystemExit):
        raise result.exception
    assert "Traceback" not in result.output
    return result


def document(result: Result) -> dict[str, Any]:
    """The one JSON document on standard output, and nothing else there."""
    (line,) = result.stdout.splitlines()
    found: dict[str, Any] = json.loads(line)
    return found


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A new bench folder, which is the current folder."""
    assert evenarm("new", str(tmp_path / "bench")).exit_code == 0
    monkeypatch.chdir(tmp_path / "bench")
    return tmp_path / "bench"


def change(folder: Path, old: str, new: str, name: str = "bench.toml") -> None:
    text = (folder / name).read_text()
    assert text.count(old) >= 1
    (folder / name).write_text(text.replace(old, new, 1))


# --- new -----------------------------------------------------------------------------------------


def test_new_writes_a_folder_that_checks(tmp_path: Path) -> None:
    target = tmp_path / "deep" / "north table"
    result = evenarm("new", str(target))
    assert result.exit_code == 0
    for name in FILES:
        assert (target / name).is_file()
        assert name in result.stdout
    assert f"cd '{target}'" in result.stdout
    assert "evenarm check" in result.stdout
    assert evenarm("check", "--bench", str(target / "bench.toml")).exit_code == 0


def test_new_as_json(tmp_path: Path) -> None:
    told = document(evenarm("new", str(tmp_path / "b"), "--json"))
    assert told["schema"] == "evenarm.new/1"
    assert told["folder"] == str(tmp_path / "b")
    assert told["files"] == [str(tmp_path / "b" / name) for name in FILES]


def test_new_fills_an_existing_folder(tmp_path: Path) -> None:
    (tmp_path / "notes.txt").write_text("mine")
    assert evenarm("new", str(tmp_path)).exit_code == 0
    assert (tmp_path / "notes.txt").read_text() == "mine"


@pytest.mark.parametrize("name", FILES)
def test_new_overwrites_nothing(tmp_path: Path, name: str) -> None:
    (tmp_path / name).parent.mkdir(exist_ok=True)
    (tmp_path / name).write_text("mine")
    before = sorted(tmp_path.rglob("*"))
    result = evenarm("new", str(tmp_path))
    assert result.exit_code == 2
    assert f"{name} would be overwritten" in result.stderr
    assert (tmp_path / name).read_text() == "mine"
    assert sorted(tmp_path.rglob("*")) == before


def test_new_does_not_follow_a_dangling_link(tmp_path: Path) -> None:
    (tmp_path / "bench.toml").symlink_to(tmp_path / "elsewhere")
    assert evenarm("new", str(tmp_path)).exit_code == 2
    assert not (tmp_path / "elsewhere").exists()


def test_new_in_place_of_a_file(tmp_path: Path) -> None:
    (tmp_path / "b").write_text("mine")
    for target in (tmp_path / "b", tmp_path / "b" / "c"):
        result = evenarm("new", str(target), "--json")
        assert result.exit_code == 2
        assert document(result)["schema"] == "evenarm.error/1"
    assert (tmp_path / "b").read_text() == "mine"


def test_new_loses_no_race_for_a_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    real_lexists = os.path.lexists

    def nothing_yet(path: str | Path) -> bool:
        return real_lexists(path) and Path(path).name != "bench.toml"

    (tmp_path / "bench.toml").write_text("somebody else's")
    monkeypatch.setattr(os.path, "lexists", nothing_yet)
    assert evenarm("new", str(tmp_path)).exit_code == 2
    assert (tmp_path / "bench.toml").read_text() == "somebody else's"


def test_new_takes_back_what_it_began(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    real_mkdir = Path.mkdir

    def no_logs(self: Path, *more: Any, **named: Any) -> None:
        if self.name == "logs":
            raise PermissionError(13, "Permission denied", str(self))
        real_mkdir(self, *more, **named)

    monkeypatch.setattr(Path, "mkdir", no_logs)
    result = evenarm("new", str(tmp_path / "a" / "b"))
    assert result.exit_code == 2
    assert "Permission denied" in result.stderr
    assert not (tmp_path / "a").exists()


# --- check ---------------------------------------------------------------------------------------


@pytest.mark.usefixtures("folder")
def test_check_shows_how_the_bench_is_understood() -> None:
    result = evenarm("check")
    assert result.exit_code == 0
    assert result.stderr == ""
    for text in (
        "Practice bench", "path factor +2", "2.000 54 mm of OPD", "0 mm to 25 mm", "1 mm/s",
        "filter 2 nm", "159 um", "12.5 mm, within 5 mm", "N-BK7", "path-equalisation",
        "every check passed", "1 kHz\n", "20 mV\n", "5 mV\n", "0.6 V ",
    ):  # fmt: skip
        assert text in result.stdout, text
    assert "memory" not in result.stdout  # the driver's own default says nothing about this bench


def test_check_shows_a_setting_that_was_given(folder: Path) -> None:
    change(folder, 'noise = "5 mV"', 'noise = "5 mV"\nsettings = { memory = 500 }')
    assert re.search(r"memory +500\n", evenarm("check").stdout)


@pytest.mark.usefixtures("folder")
def test_check_as_json() -> None:
    told = document(evenarm("check", "--json"))
    assert told["schema"] == "evenarm.check/1"
    assert told["passed"]
    assert (told["failed"], told["warnings"]) == ([], [])
    assert told["devices"]["stage"]["speed"] == {"value": pytest.approx(1.0), "unit": "mm/s"}
    assert told["devices"]["detector"]["settings"][0]["name"] == "memory"
    # For a Gaussian of 600 nm and 60 nm: l1 l2 / (l2 - l1), and 0.882542 and 0.664283 of it
    # (Goodman, Statistical Optics, 5.1).
    lengths = told["sources"][0]["coherence_length"]
    assert lengths["rule"]["value"] == pytest.approx(5.985, rel=1e-6)
    assert lengths["fwhm"]["value"] == pytest.approx(0.882542 * 5.985, rel=5e-5)
    assert lengths["integral"]["value"] == pytest.approx(0.664283 * 5.985, rel=5e-5)
    assert "path-equalisation" in [row["name"] for row in told["procedures"]]
    assert "identities" not in told


@pytest.mark.usefixtures("folder")
def test_check_connects() -> None:
    result = evenarm("check", "--connect", "--json")
    told = document(result)
    assert result.exit_code == 0
    assert told["identities"]["stage"]["simulated"] is True
    assert "talking to the devices" in result.stderr
    assert "answers as" in evenarm("check", "--connect").stdout


def test_check_without_limits_fails_and_is_no_input_error(folder: Path) -> None:
    change(folder, 'travel = ["0 mm", "25 mm"]', "")
    result = evenarm("check")
    assert result.exit_code == 1
    assert "no motion" in result.stdout
    assert "1 check failed" in result.stdout
    told = document(evenarm("check", "--json"))
    assert not told["passed"]
    assert told["devices"]["stage"]["travel"] is None


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ('laser_class = "none"', "", "strictest"),
        ('risk_group = "exempt"', "", "no risk_group"),
        ("safety_contact", "# safety_contact", "no safety_contact"),
        ("reference_wavelength", "# reference_wavelength", "no reference_wavelength"),
        ('noise = "5 mV"', "", "no noise"),
        ('dark = "0.02 V"', "", "no dark"),
        ('range = ["0 V", "5 V"]', "", "no range"),
        ('signal = "1 V"', 'signal = "3 V"', "would go beyond"),
        ('reversal_allowance = "20 um"', 'reversal_allowance = "0 um"', "straight into the zero"),
        ("[expect]", "[records]\n[later]", ""),
    ],
)
def test_check_warns(folder: Path, old: str, new: str, said: str) -> None:
    if not said:  # a bench without [expect]
        text = (folder / "bench.toml").read_text()
        start, stop = text.index("[expect]"), text.index("[glass]")
        (folder / "bench.toml").write_text(text[:start] + text[stop:])
        said = "no [expect]"
    else:
        change(folder, old, new)
    result = evenarm("check")
    assert result.exit_code == 0
    (line,) = [line for line in result.stdout.splitlines() if line.startswith("warning")]
    assert said in line
    assert result.stdout.splitlines()[-1] == "passed with 1 warning"


def test_check_refuses_with_every_problem(folder: Path) -> None:
    change(folder, "path_factor = 2", "path_factor = 0")
    change(folder, 'travel = ["0 mm", "25 mm"]', 'travel = ["25 mm", "0 mm"]')
    change(folder, "contrast = 0.6", "contrst = 0.6", "world.toml")
    result = evenarm("check")
    assert result.exit_code == 2
    assert result.stdout == ""
    for text in ("bench.path_factor", "stage.travel", "truth.contrst", "'contrast'", "mend:"):
        assert text in result.stderr
    assert len(result.stderr.splitlines()) < 24  # one screen
    told = document(evenarm("check", "--json"))
    assert told["schema"] == "evenarm.error/1"
    assert len(told["problems"]) == 3


def test_check_of_what_is_not_there(folder: Path) -> None:
    for name in ("nix.toml", str(folder), str(folder / "logs")):
        result = evenarm("check", "--bench", name)
        assert result.exit_code == 2
        assert "where:" in result.stderr
        assert "mend:" in result.stderr


def test_check_names_a_procedure_that_cannot_be_used(folder: Path) -> None:
    (folder / "procedures" / "own.toml").write_text("name = 5\n")
    result = evenarm("check")
    assert result.exit_code == 2
    assert "own.toml" in result.stderr


def test_the_shipped_bench_is_announced(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    result = evenarm("check")
    assert result.exit_code == 0
    assert result.stderr.count("\n") == 1
    assert "no bench.toml here" in result.stderr
    assert f"records  {tmp_path / 'logs' / 'journal.sqlite3'}" in result.stdout
    assert "sqlite:" not in result.stdout
    assert list(tmp_path.iterdir()) == []


def test_nothing_from_a_file_reaches_the_terminal_raw(folder: Path) -> None:
    change(folder, 'name = "Practice bench"', r'name = "a\u202eb"')
    assert "\u202e" not in evenarm("check").output
    change(folder, r'name = "a\u202eb"', r'nam = "\u001b[2J"')
    assert "\x1b" not in evenarm("check").output


# --- drivers -------------------------------------------------------------------------------------


def test_drivers_lists_without_importing() -> None:
    code = (
        "import sys; from bench.cli import app\n"
        "try: app(['drivers'])\n"
        "except SystemExit as done: assert done.code in (0, None), done.code\n"
        "sys.exit('drivers.simulated' in sys.modules)"
    )
    done = subprocess.run([sys.executable, "-c", code], check=False, capture_output=True, text=True)
    assert done.returncode == 0
    assert "stage" in done.stdout
    assert "simulated" in done.stdout


def test_drivers_as_json() -> None:
    told = document(evenarm("drivers", "--json"))
    assert told["schema"] == "evenarm.drivers/1"
    assert {"kind", "name", "target", "from"} == set(told["drivers"][0])
    assert ("detector", "simulated") in [(row["kind"], row["name"]) for row in told["drivers"]]


def test_faults_are_those_that_the_drivers_declare() -> None:
    stage = registry.load("stage", "simulated")
    (setting,) = [setting for setting in stage.world if setting.name == "fault[].kind"]
    result = evenarm("drivers", "--faults")
    for kind in setting.choices:
        assert kind in result.stdout
    told = document(evenarm("drivers", "--faults", "--json"))
    assert [row["kind"] for row in told["faults"]] == list(setting.choices)
    assert {"at", "lasts"} <= {key["name"] for key in told["faults"][0]["keys"]}
    assert {row["kind"]: row["doc"] for row in told["faults"]} == stage.faults
    # Kinds and keys stand in one column, what they mean in another.
    lines = [line for line in result.stdout.splitlines() if line.startswith("  ")]
    column = 2 + max(len(kind) for kind in setting.choices) + 2
    assert {line[column - 2 : column] for line in lines} == {"  "}
    assert {line[:column].strip(): line[column:] for line in lines}.items() >= stage.faults.items()


def test_a_fault_without_an_explanation_is_still_listed(monkeypatch: pytest.MonkeyPatch) -> None:
    silent = dataclasses.replace(registry.load("stage", "simulated"), faults={})
    monkeypatch.setattr(registry, "load", lambda kind, name: silent)
    result = evenarm("drivers", "--faults")
    assert result.exit_code == 0
    assert "  lamp out\n" in result.stdout


def test_settings_of_a_driver() -> None:
    result = evenarm("drivers", "--settings", "simulated")
    assert result.exit_code == 0
    for text in ("memory", "readings kept", "truth.zero", "required", "stage.reversal_error"):
        assert text in result.stdout
    told = document(evenarm("drivers", "--settings", "simulated", "--json"))
    (detector,) = [row for row in told["drivers"] if row["kind"] == "detector"]
    assert detector["settings"][0]["unit"] == "int"


def test_settings_of_no_driver() -> None:
    result = evenarm("drivers", "--settings", "simulatd")
    assert result.exit_code == 2
    assert "'simulated'" in result.stderr


def test_a_broken_plug_in_is_named_beside_the_others(monkeypatch: pytest.MonkeyPatch) -> None:
    broken = Available("stage", "broken", "nowhere:STAGE", "a package")
    whole = registry.available()
    load = registry.load

    def load_some(kind: str, name: str) -> Any:
        if name == "broken":
            raise LoadFailure(broken, "ModuleNotFoundError: \x1b[31mnowhere")
        return load(kind, name)

    monkeypatch.setattr(registry, "available", lambda: (*whole, broken))
    monkeypatch.setattr(registry, "load", load_some)
    assert evenarm("drivers").exit_code == 0
    result = evenarm("drivers", "--load", "--json")
    assert result.exit_code == 1
    told = document(result)
    assert [row["name"] for row in told["failed"]] == ["broken"]
    assert "'broken'" in result.stderr
    assert "\x1b" not in result.output
    assert [row["summary"] for row in told["drivers"] if row["name"] == "simulated"]


# --- all -----------------------------------------------------------------------------------------


@pytest.mark.parametrize("command", ["new", "check", "drivers"])
def test_every_command_has_help(command: str) -> None:
    result = evenarm(command, "--help")
    assert result.exit_code == 0
    assert "--json" in result.stdout


def test_the_command_line_is_light_to_import() -> None:
    code = (
        "import sys, bench.cli.new, bench.cli.check, bench.cli.drivers, bench.cli.benchfile;"
        "print(*({'numpy', 'pydantic', 'pint', 'scipy', 'textual', 'sqlalchemy'}"
        " & set(sys.modules)))"
    )
    done = subprocess.run(
        [sys.executable, "-c", code], check=True, capture_output=True, text=True, env=os.environ
    )
    assert done.stdout.strip() == ""
