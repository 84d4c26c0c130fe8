"""``evenarm plan`` as a script and as a technician meet it, and what it takes from a bench."""

from __future__ import annotations

import json
import math
import re
from dataclasses import replace
from pathlib import Path

import pytest
from typer.testing import CliRunner

from bench.cli import app
from bench.cli.benchfile import open_bench
from bench.cli.plan import duration_text
from bench.errors import UsageError
from bench.procedure.facts import belief_from, bench_facts, excluded_sources
from bench.spec import find_bench, load_bench
from bench.spec.model import BenchSpec
from drivers import registry

LASER = """
[[source]]
name = "laser"
spectrum = { shape = "lorentzian", centre = "632.8 nm", fwhm = "1 MHz" }
signal = "1 V"
change_time = "5 s"
laser_class = "2"
"""


@pytest.fixture(autouse=True)
def elsewhere(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """No command here finds a bench of the checkout."""
    monkeypatch.chdir(tmp_path)
    return tmp_path


def _written(folder: Path, *changes: tuple[str, str], extra: str = "") -> Path:
    shipped = find_bench(None, folder).path
    text = shipped.read_text(encoding="utf-8")
    for old, new in changes:
        assert old in text
        text = text.replace(old, new)
    (folder / "bench.toml").write_text(text + extra, encoding="utf-8")
    world = shipped.with_name("world.toml").read_text(encoding="utf-8")
    (folder / "world.toml").write_text(world, encoding="utf-8")
    return folder / "bench.toml"


def _spec(path: Path) -> BenchSpec:
    return load_bench(path, declared=registry.declared)


@pytest.fixture
def spec(elsewhere: Path) -> BenchSpec:
    return _spec(_written(elsewhere))


# --- the command ----------------------------------------------------------------------------------


def test_the_document_is_as_promised():
    result = CliRunner().invoke(app, ["plan", "--json"])
    assert result.exit_code == 0, result.output
    document = json.loads(result.stdout)
    assert document["schema"] == "evenarm.plan/1"
    assert set(document) == {
        "schema",
        "legs",
        "expected_time",
        "worst_time",
        "miss_probability",
        "compared",
    }
    for leg in document["legs"]:
        assert leg["mode"] in {"sweep", "step"}
        assert ("speed" in leg) == (leg["mode"] == "sweep")
        assert ("increment" in leg) == (leg["mode"] == "step")
        for key in ("from", "to", "half_width_after"):
            assert leg[key]["unit"] == "um"
        assert leg["expected_time"]["unit"] == "s"
        assert leg["readings"] > 0
        assert leg["why"]
    assert set(document["compared"]) == {"white light only", "lower bound"}
    expected = document["expected_time"]["value"]
    assert document["compared"]["lower bound"]["value"] < expected
    assert expected <= document["compared"]["white light only"]["value"] + 1e-9
    assert 0.0 < document["miss_probability"] < 0.02


def test_the_text_fits_eighty_columns():
    result = CliRunner().invoke(app, ["plan"])
    assert result.exit_code == 0, result.output
    lines = result.stdout.splitlines()
    assert max(map(len, lines)) <= 80
    assert "Practice bench" in lines[0]
    for word in ("expected", "at worst", "missed", "compared", "lower bound", "verify, white"):
        assert word in result.stdout
    assert "simulated bench that comes with Evenarm" in result.stderr


@pytest.mark.parametrize("columns", ["60", "20", "66"])
def test_the_text_is_wrapped_at_the_width_of_a_narrow_terminal(monkeypatch, columns):
    monkeypatch.setenv("COLUMNS", columns)
    text = CliRunner().invoke(app, ["plan"]).stdout
    assert max(map(len, text.splitlines())) <= max(60, int(columns))
    assert re.search(r"missed +chance of missing it: 1 in \d+\n", text)
    assert "no plan can" in " ".join(text.split())


@pytest.mark.parametrize("seed", [-1, 2**63])
def test_a_seed_that_cannot_be_is_blamed_on_its_option(seed):
    with pytest.raises(UsageError, match="cannot be a seed") as caught:
        open_bench(None, seed)
    assert caught.value.where == "--seed"


def test_the_source_in_use_saves_its_change(spec):
    def seconds(*options: str) -> float:
        result = CliRunner().invoke(app, ["plan", "--json", *options])
        compared = json.loads(result.stdout)["compared"]
        return float(compared["white light only"]["value"])

    change_s = spec.sources[0].change_time_s
    assert change_s > 0.0
    assert seconds() - seconds("--source", "white") == pytest.approx(change_s, abs=0.01)


def test_a_source_that_is_not_there():
    result = CliRunner().invoke(app, ["plan", "--source", "candle"])
    assert result.exit_code == 2
    assert "'white'" in result.stderr
    assert result.stdout == ""


def test_a_laser_is_left_out_and_why(elsewhere):
    _written(elsewhere, extra=LASER)
    result = CliRunner().invoke(app, ["plan"])
    assert result.exit_code == 0, result.output
    assert "Not used: laser" in result.stdout
    assert max(map(len, result.stdout.splitlines())) <= 80


def test_a_zero_that_cannot_be_reached(elsewhere):
    _written(elsewhere, ('zero = "12.5 mm"', 'zero = "60 mm"'))
    result = CliRunner().invoke(app, ["plan"])
    # Either the description is refused, or there is an honest "no plan"; never a plan.
    assert result.exit_code in {1, 2}
    assert "outside" in result.output or "travel" in result.output


def test_no_limits_no_plan(elsewhere):
    path = _written(elsewhere)
    lines = path.read_text(encoding="utf-8").splitlines()
    path.write_text("\n".join(x for x in lines if not x.startswith("travel")), encoding="utf-8")
    result = CliRunner().invoke(app, ["plan"])
    assert result.exit_code == 2
    assert "travel" in result.stderr
    assert "Traceback" not in result.output


@pytest.mark.parametrize(
    ("time_s", "text"),
    [
        (0.04, "0.0 s"),
        (9.94, "9.9 s"),
        (9.96, "10 s"),
        (80.2, "1 min 20 s"),
        (7500.0, "2 h 05 min"),
    ],
)
def test_times_are_said_as_people_say_them(time_s, text):
    assert duration_text(time_s) == text


# --- what it takes from a bench -------------------------------------------------------------------


def test_facts_are_the_benchs_own(spec):
    facts = bench_facts(spec)
    assert facts.opd_per_m == pytest.approx(2.0 * 1.00027, rel=1e-6)
    assert facts.travel_m == (0.0, 25e-3)
    assert facts.approach == 1
    assert facts.rate_hz == 1000.0
    assert facts.noise == pytest.approx(5e-3)
    assert [source.name for source in facts.sources] == ["white", "filter 10 nm", "filter 2 nm"]
    # 0.88254 of l1 l2 / (l2 - l1): the Gaussian's closed form (Mandel 1959).
    assert facts.sources[0].coherence_fwhm_m == pytest.approx(0.882542 * 5.985e-6, rel=1e-4)


def test_unknown_noise_is_a_hundredth_of_the_weakest_signal(spec):
    silent = replace(spec, detector=replace(spec.detector, noise=None))
    assert bench_facts(silent).noise == pytest.approx(0.01 * 0.3)


def test_glass_shifts_sources_apart_by_their_group_indices(spec):
    """0.1 mm of N-BK7 between 550 and 633 nm: n_g 1.5461971 and 1.5367420 (catalogue formula)."""
    sources = tuple(
        replace(source, mean_wavelength_m=wavelength_m)
        for source, wavelength_m in zip(spec.sources, (550e-9, 633e-9, 600e-9), strict=True)
    )
    shift_m = 0.1e-3 * (1.5461971 - 1.5367420) / spec.opd_per_m
    facts = bench_facts(replace(spec, sources=sources))
    assert facts.glass_shift_m == pytest.approx(math.hypot(shift_m, 25e-9), rel=1e-3)
    unnamed = bench_facts(replace(spec, sources=sources, glass=None))
    assert unnamed.glass_shift_m < facts.glass_shift_m / 3.0


def test_beliefs_follow_what_is_expected(spec):
    assert spec.expect is not None
    assert belief_from(spec).half_width_m == pytest.approx(0.95 * 5e-3)
    normal = replace(spec.expect, half_width_m=None, standard_uncertainty_m=1e-3)
    assert belief_from(replace(spec, expect=normal)).sd_m == pytest.approx(1e-3, rel=0.01)
    anywhere = belief_from(replace(spec, expect=None))
    assert anywhere.half_width_m == pytest.approx(0.95 * 12.5e-3)


def test_fringes_wider_than_the_range_show_no_place(spec):
    assert excluded_sources(spec) == ()
    tight = replace(spec, expect=replace(spec.expect, half_width_m=30e-6))
    assert [entry.name for entry in excluded_sources(tight)] == ["filter 2 nm"]
    assert [source.name for source in bench_facts(tight).sources] == ["white", "filter 10 nm"]


def test_a_bench_with_a_laser_only(spec):
    only = replace(spec, sources=(replace(spec.sources[0], name="laser", coherence_fwhm_m=100.0),))
    with pytest.raises(UsageError, match="no source") as caught:
        bench_facts(only)
    assert "laser" in caught.value.why
