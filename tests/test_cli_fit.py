"""``evenarm fit``: documents, text, exit statuses; a scan of its own made from a sum of cosines."""

from __future__ import annotations

import json
import math
from pathlib import Path

import numpy as np
import pytest
from typer.testing import CliRunner, Result

from bench.cli import app
from bench.cli.fit import _alarm_text, _chance_text

ZERO_UM = 13.2184


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    made = tmp_path_factory.mktemp("scans")
    x = np.arange(0.0, 26.0, 0.02)
    wavenumber = np.linspace(1.30, 2.05, 301)
    power = np.exp(-4.0 * math.log(2.0) * ((wavenumber - 1.6708) / 0.1671) ** 2)
    opd = 2.0 * 1.00027 * (x - ZERO_UM)
    fringes = np.cos(2.0 * math.pi * np.outer(opd, wavenumber)) @ (power / power.sum())
    noise = np.random.default_rng(3).normal(0.0, 0.005, (2, x.size))
    head = "# path_factor = 2\n# at_wavelength = 600 nm\n# material = N-BK7\n# dark = 0 V\n"
    head += "position [um],signal [V]\n"

    def save(name: str, signal: np.ndarray) -> None:
        lines = [f"{a:.5f},{b:.6f}" for a, b in zip(x, signal, strict=True)]
        (made / name).write_text(head + "\n".join(lines) + "\n")

    save("packet.csv", 2.0 + fringes + noise[0])
    save("noise.csv", 2.0 + noise[1])
    text = (made / "packet.csv").read_text().splitlines()
    (made / "bad.csv").write_text("\n".join([*text[:9], "oops,1", *text[9:]]))
    (made / "counts.csv").write_text("\n".join(["position,signal", *text[5:]]))
    (made / "empty.csv").write_text("")
    return made


def run(*args: object) -> Result:
    return CliRunner().invoke(app, ["fit", *map(str, args)])


def documents(result: Result) -> list[dict]:
    return [json.loads(line) for line in result.stdout.splitlines()]


def test_a_packet_is_documented_as_promised(folder: Path) -> None:
    result = run(folder / "packet.csv", "--json")
    assert result.exit_code == 0
    (document,) = documents(result)
    assert document["schema"] == "evenarm.fit/1"
    assert document["file"].endswith("packet.csv")
    assert document["found"] is True
    assert document["axis"] == "position"
    zero = document["zero"]
    assert zero["unit"] == "um"
    assert abs(zero["value"] - ZERO_UM) < 4.0 * zero["standard_uncertainty"]
    assert zero["standard_uncertainty"] < 0.005
    assert document["at_wavelength"]["value"] == pytest.approx(600.0)
    assert document["at_wavelength"]["unit"] == "nm"
    fringe = document["fringe_zero"]
    assert fringe["kind"] == "bright"
    assert fringe["probability"] > 0.99
    assert fringe["value"] == pytest.approx(ZERO_UM, abs=0.002)
    assert document["contrast"]["value"] == pytest.approx(0.5, abs=0.01)
    assert document["amplitude"]["unit"] == "V"
    assert document["noise"] == {"value": pytest.approx(0.005, rel=0.1), "unit": "V"}
    assert document["mean_wavelength"]["value"] == pytest.approx(598.5, abs=1.0)
    lengths = document["coherence_length"]
    assert set(lengths) == {"rule", "fwhm", "integral", "packet_width"}
    assert lengths["rule"]["value"] == pytest.approx(1.0 / 0.1671, rel=0.02)
    glass = document["residual_glass"]
    assert glass["material"] == "N-BK7"
    assert glass["thickness"]["unit"] == "mm"
    assert glass["dispersion"]["unit"] == "fs^2"
    assert abs(glass["thickness"]["value"]) < 4.0 * glass["thickness"]["standard_uncertainty"]
    assert 0.0 < document["false_alarm_probability"] <= 1e-3
    assert document["warnings"] == []


def test_text_for_people(folder: Path) -> None:
    result = run(folder / "packet.csv")
    assert result.exit_code == 0
    text = result.stdout
    assert "13.21" in text
    assert "um" in text
    assert "bright" in text
    assert "coherence" in text
    assert max(map(len, text.splitlines())) <= 100


def test_no_packet_is_an_honest_negative(folder: Path) -> None:
    result = run(folder / "noise.csv", "--json")
    assert result.exit_code == 1
    (document,) = documents(result)
    assert document["found"] is False
    assert "zero" not in document
    assert document["reason"]
    shown = run(folder / "noise.csv")
    assert shown.exit_code == 1
    assert "no zero" in shown.stdout
    assert document["reason"] in shown.stdout


def test_a_bad_file_does_not_keep_the_others_from_being_read(folder: Path) -> None:
    result = run(folder / "empty.csv", folder / "noise.csv", folder / "packet.csv", "--json")
    assert result.exit_code == 2
    error, noise, packet = documents(result)
    assert error["schema"] == "evenarm.error/1"
    assert "empty" in error["what"]
    assert noise["found"] is False
    assert packet["found"] is True


@pytest.mark.parametrize("name", ["absent.csv", ".", "empty.csv"])
def test_bad_input_says_what_and_where_without_a_traceback(folder: Path, name: str) -> None:
    result = run(folder / name)
    assert result.exit_code == 2
    assert result.stdout == ""
    assert "where" in result.stderr
    assert "Traceback" not in result.output
    assert len(result.stderr.splitlines()) < 24


def test_bad_rows_are_named(folder: Path) -> None:
    result = run(folder / "bad.csv", "--json")
    assert result.exit_code == 0
    assert documents(result)[0]["bad_rows"] == 1
    assert "line 10" in result.stderr


def test_counts_give_a_zero_in_counts_and_a_warning(folder: Path) -> None:
    (document,) = documents(run(folder / "counts.csv", "--json"))
    assert document["zero"]["unit"] == "counts"
    assert document["zero"]["value"] == pytest.approx(ZERO_UM, abs=0.01)
    assert [warning["code"] for warning in document["warnings"]] == ["no-length"]
    assert "coherence_length" not in document
    assert "mean_wavelength" not in document


def test_a_length_without_a_path_factor_has_no_opd(folder: Path) -> None:
    (document,) = documents(run(folder / "counts.csv", "--position-unit", "1 um", "--json"))
    assert document["zero"]["unit"] == "um"
    assert document["zero"]["value"] == pytest.approx(ZERO_UM, abs=0.01)
    assert "no-length" in [warning["code"] for warning in document["warnings"]]
    assert "coherence_length" not in document


def test_options_say_what_the_file_leaves_open(folder: Path) -> None:
    said = ["--position-unit", "1 um", "--path-factor", "2", "--material", "fused silica"]
    (document,) = documents(run(folder / "counts.csv", *said, "--at", "650 nm", "--json"))
    assert document["at_wavelength"]["value"] == pytest.approx(650.0)
    assert document["residual_glass"]["material"].lower() == "fused silica"
    assert "no-length" not in [warning["code"] for warning in document["warnings"]]
    (opd,) = documents(run(folder / "counts.csv", "--position-unit", "2 um", "--is-opd", "--json"))
    assert opd["axis"] == "opd"
    assert opd["zero"]["value"] == pytest.approx(2.0 * ZERO_UM, abs=0.02)


@pytest.mark.parametrize(
    "said",
    [
        ["--position-unit", "5 V"],
        ["--path-factor", "0"],
        ["--at", "600"],
        ["--position", "gamma"],
        ["--material", "butter"],
        ["--source", "white"],
    ],
)
def test_wrong_options_are_input_errors(folder: Path, said: list[str]) -> None:
    result = run(folder / "packet.csv", *said)
    assert result.exit_code == 2
    assert "mend" in result.stderr
    assert "Traceback" not in result.output


def test_a_bench_tells_the_source(folder: Path, tmp_path: Path) -> None:
    made = CliRunner().invoke(app, ["new", str(tmp_path / "bench")])
    assert made.exit_code == 0
    bench = tmp_path / "bench" / "bench.toml"
    result = run(folder / "counts.csv", "--position-unit", "1 um", "--bench", bench, "--json")
    assert result.exit_code == 0
    assert "coherence_length" in documents(result)[0]
    wrong = run(folder / "counts.csv", "--bench", bench, "--source", "candle")
    assert wrong.exit_code == 2
    assert "candle" in wrong.stderr


def test_names_from_outside_do_not_reach_the_terminal_raw(folder: Path) -> None:
    sly = folder / "a\x1b[2Jb.csv"
    sly.write_text((folder / "packet.csv").read_text())
    assert "\x1b" not in run(sly).stdout


def test_the_uncertainty_of_a_count_moves_all_positions_and_is_said(folder: Path) -> None:
    said = ["--position-unit", "1.00(4) um", "--path-factor", "2"]
    (document,) = documents(run(folder / "counts.csv", *said, "--json"))
    assert document["position_unit"] == {"value": 1.0, "unit": "um", "standard_uncertainty": 0.04}
    assert set(document["zero"]) == {"value", "unit", "standard_uncertainty"}
    assert document["zero"]["standard_uncertainty"] < 0.01  # not 4 % of 13 um
    lines = run(folder / "counts.csv", *said).stdout.splitlines()
    at = next(i for i, line in enumerate(lines) if line.startswith("  zero "))
    assert "without the 4 % of the position unit, which moves all positions alike" in lines[at + 1]
    exact = run(folder / "counts.csv", "--position-unit", "1 um", "--path-factor", "2")
    assert "moves all positions" not in exact.stdout


def test_a_unit_of_the_file_is_not_overridden(folder: Path) -> None:
    result = run(folder / "packet.csv", "--position-unit", "18.55(74) pm", "--json")
    (document,) = documents(result)
    assert document["zero"]["value"] == pytest.approx(ZERO_UM, abs=0.01)
    assert "position_unit" not in document
    assert "its positions are in um; --position-unit is not used" in result.stderr


def test_what_would_give_lengths_is_named(folder: Path) -> None:
    result = run(folder / "counts.csv")
    assert "--position-unit" in result.stdout
    assert "--path-factor" in result.stdout


def test_chances_are_said_in_words(folder: Path) -> None:
    text = run(folder / "packet.csv").stdout
    assert "that it is the one nearest to the zero: certain" in text
    assert "chance that noise alone looks like this: below 1 in " in text
    assert _chance_text(0.54) == "54 %"
    assert _alarm_text(1e-3) == "below 1 in 1000"
    assert _alarm_text(0.2) == "at most 20 %"


def test_bad_rows_are_counted_in_grammar(folder: Path) -> None:
    assert "1 bad row left out (line 10)" in run(folder / "bad.csv").stderr
