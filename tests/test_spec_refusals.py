"""bench.toml that cannot be used: what is said, for each way in which it can be wrong."""

from __future__ import annotations

import contextlib
import os
import subprocess
import sys
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from bench.errors import EvenarmError, InputError, Problem, SpecError
from bench.planning.legs import FINAL_ROOM
from bench.spec import load_bench
from bench.spec.checks import SCAN_PACKETS
from bench.spec.lines import line_of
from bench.spec.schema import TABLES
from drivers import registry

SMALL = """
[bench]
name = "small"
path_factor = 2
[stage]
driver = "simulated"
speed = "1 mm/s"
travel = ["0 mm", "25 mm"]
[detector]
driver = "simulated"
rate = "1 kHz"
[[source]]
name = "white"
spectrum = { shape = "gaussian", centre = "600 nm", fwhm = "60 nm" }
signal = "1 V"
[simulation]
world = "world.toml"
"""


def load(folder: Path, text: str | bytes, **more: Any) -> object:
    (folder / "world.toml").write_text('[truth]\nzero = "12.5 mm"\n')
    path = folder / "bench.toml"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    given: dict[str, Any] = {"declared": registry.declared, "known_drivers": registry.names}
    return load_bench(path, **(given | more))


def problems(folder: Path, text: str, **more: Any) -> tuple[Problem, ...]:
    with pytest.raises(SpecError) as caught:
        load(folder, text, **more)
    assert caught.value.exit_status == 2
    assert str(folder) in caught.value.where
    return caught.value.problems


CHANGED = [
    # what stands in the good file, what in its place, where the problem is, what is said, nearest
    ("path_factor = 2", "path_factor = 0", "bench.path_factor", "must not be zero", ""),
    ("path_factor = 2", "path_factor = nan", "bench.path_factor", "finite", ""),
    ("path_factor = 2", "path_factor = inf", "bench.path_factor", "finite", ""),
    ("path_factor = 2", 'path_factor = "2"', "bench.path_factor", "number", ""),
    ("path_factor = 2", "path_factor = 2000", "bench.path_factor", "0.001 to 100", ""),
    ("path_factor = 2", "", "bench.path_factor", "required", ""),
    ("path_factor = 2", 'moving_arm = "A"', "bench.increasing", "required", ""),
    ("path_factor = 2", "path_factor = 2\nfolds = 2", "bench.folds", "keep one", ""),
    ("path_factor = 2", 'moving_arm = "C"\nincreasing = "longer"', "bench.moving_arm", '"A"', ""),
    ("path_factor = 2", "pathfactor = 2\npath_factor = 2", "bench.pathfactor", "no such key",
     "path_factor"),
    ('name = "small"', "", "bench.name", "required", ""),
    ('name = "small"', "name = 5", "bench.name", "must be text", ""),
    ('name = "small"', 'name = ""', "bench.name", "at least 1", ""),
    ('name = "small"', r'name = "\u001b[2J"', "bench.name", "control characters", ""),
    ('name = "small"', 'name = "s"\nallow_unattended = "yes"', "bench.allow_unattended", "", ""),
    ('name = "small"', 'name = "s"\nreference_wavelength = "600 mm"',
     "bench.reference_wavelength", "200 nm to 20 um", ""),
    ('["0 mm", "25 mm"]', '["25 mm", "0 mm"]', "stage.travel", "lower end", ""),
    ('["0 mm", "25 mm"]', '["5 mm", "5 mm"]', "stage.travel", "lower end", ""),
    ('["0 mm", "25 mm"]', '["0 mm"]', "stage.travel[1]", "required", ""),
    ('["0 mm", "25 mm"]', '"25 mm"', "stage.travel", "pair", ""),
    ('["0 mm", "25 mm"]', '[0, "25 mm"]', "stage.travel[0]", "no unit", ""),
    ('["0 mm", "25 mm"]', '["0 mm", "nan mm"]', "stage.travel[1]", "not a finite number", ""),
    ('"1 mm/s"', "1", "stage.speed", '"1 mm/s"', ""),
    ('"1 mm/s"', "nan", "stage.speed", "no unit", ""),
    ('"1 mm/s"', '"0 mm/s"', "stage.speed", "more than zero", ""),
    ('"1 mm/s"', '"-1 mm/s"', "stage.speed", "more than zero", ""),
    ('"1 mm/s"', '"1 mm"', "stage.speed", "not a speed", ""),
    ('"1 mm/s"', '"1 mm/ss"', "stage.speed", "not a unit", ""),
    ('"1 mm/s"', '"1 mm/s"\nspede = 1', "stage.spede", "no such key", "speed"),
    ('"1 mm/s"', '"1 mm/s"\nrate = "1 Hz"', "stage.rate", "belongs into [detector]", ""),
    ('"1 mm/s"', '"1 mm/s"\nsettle = "-1 s"', "stage.settle", "zero or more", ""),
    ('"1 mm/s"', '"1 mm/s"\napproach = "decrease"', "stage.approach", "increasing", "decreasing"),
    ('"1 mm/s"', '"1 mm/s"\nlongest_move = "30 mm"', "stage.longest_move", "fit", ""),
    ('"1 mm/s"', '"1 mm/s"\nreversal_allowance = "30 mm"', "stage.reversal_allowance", "fit", ""),
    ('"1 mm/s"', '"1 mm/s"\nresolution = "0 nm"', "stage.resolution", "more than zero", ""),
    ('"1 mm/s"', '"1 mm/s"\nsettings = 5', "stage.settings", "table", ""),
    ('"1 mm/s"', '"1 mm/s"\nsettings = { port = "x" }', "stage.settings.port", "no such key", ""),
    ('[stage]\ndriver = "simulated"', '[stage]\ndriver = "simulatd"', "stage.driver",
     "there is no stage driver", "simulated"),
    ('[stage]\ndriver = "simulated"', "[stage]\ndriver = 5", "stage.driver", "text", ""),
    ('"1 kHz"', '"1 kHz"\nintegration = "2 ms"', "detector.integration", "1 ms", ""),
    ('"1 kHz"', '"1 kHz"\nrange = ["5 V", "0 V"]', "detector.range", "lower end", ""),
    ('"1 kHz"', '"1 kHz"\nrange = ["0 V", "5 A"]', "detector.range[1]", "voltage", ""),
    ('"1 kHz"', '"1 kHz"\nrange = ["0 V", "5 V"]\ndark = "6 V"', "detector.dark", "within", ""),
    ('"1 kHz"', '"1 kHz"\nrange = ["0 V", "5 V"]\nnoise = "6 V"', "detector.noise", "smaller", ""),
    ('"1 kHz"', '"1 kHz"\ndark = "1 nA"', 'source "white".signal', "like detector.dark", ""),
    ('"1 kHz"', '"1 kHz"\nnoise = "0 V"', "detector.noise", "more than zero", ""),
    ('"1 kHz"', '"1 kHz"\nsettings = { memry = 5 }', "detector.settings.memry", "", "memory"),
    ('"1 kHz"', '"1 kHz"\nsettings = { memory = 0 }', "detector.settings.memory", "1 or more", ""),
    ('"1 kHz"', '"1 kHz"\nport = "A"', "detector.port", "reserved for later", ""),
    ('"1 V"', "1", 'source "white".signal', "no unit", ""),
    ('"1 V"', '"0 V"', 'source "white".signal', "more than zero", ""),
    ('"1 V"', '"1 mm"', 'source "white".signal', "not a signal", ""),
    ('"1 V"', '"1 V"\nlaser_class = "3b"', 'source "white".laser_class', "as the label says", "3B"),
    ('"1 V"', '"1 V"\nlaser_class = 2', 'source "white".laser_class', "as the label says", ""),
    ('"1 V"', '"1 V"\nrisk_group = "exemt"', 'source "white".risk_group', "exempt", "exempt"),
    ('"gaussian"', '"gausian"', 'source "white".spectrum.shape', "lorentzian", "gaussian"),
    ('"600 nm"', '"600 mm"', 'source "white".spectrum.centre', "200 nm to 20 um", ""),
    ('"60 nm"', '"60 V"', 'source "white".spectrum.fwhm', "not a length", ""),
    ('"60 nm"', '"2 um"', 'source "white".spectrum', "wavelength zero", ""),
    ('"60 nm"', '"1 uHz"', 'source "white".spectrum', "too narrow", ""),
    (', fwhm = "60 nm"', "", 'source "white".spectrum.fwhm', "needs it", ""),
    ('shape = "gaussian", ', "", 'source "white".spectrum.shape', "required", ""),
    ('shape = "gaussian"', 'file = "a.csv"', 'source "white".spectrum', "file stands alone", ""),
    ('"60 nm" }', '"60 nm", width = 3 }', 'source "white".spectrum.width', "no such key", ""),
    ('"1 V"', '"1 V"\nfile = "a.csv"', 'source "white".file', "one of", ""),
    ("[simulation]", '[expect]\nzero = "12 mm"\n[simulation]', "expect.half_width", "required", ""),
    ("[simulation]", '[expect]\nzero = "12 mm"\nhalf_width = "13 mm"\n[simulation]',
     "expect.zero", "travel, 0 mm to 25 mm", ""),
    ("[simulation]", '[expect]\nzero = "13 mm"\nhalf_width = "12.5 mm"\n[simulation]',
     "expect.zero", "travel, 0 mm to 25 mm", ""),
    ("[simulation]", '[expect]\nzero = "12 mm"\nhalf_width = "12.5 mm"\n[simulation]',
     "expect.zero", "travel, 0 mm to 25 mm", ""),
    ("[simulation]", '[expect]\nzero = "26(1) mm"\n[simulation]', "expect.zero", "travel", ""),
    ("[simulation]",
     '[expect]\nzero = "12 mm"\nhalf_width = "1 mm"\nstandard_uncertainty = "1 mm"\n[simulation]',
     "expect.standard_uncertainty", "keep one", ""),
    ("[simulation]", '[glass]\nmaterial = "BK7"\n[simulation]', "glass.material", "known", "N-BK7"),
    ("[simulation]", '[climate]\ntemperature = "20 degC"\npressure = "1 bar"\n[simulation]',
     "climate.humidity", "required", ""),
    ("[simulation]", '[accept]\nresidual_opd = "0 nm"\n[simulation]', "accept.residual_opd",
     "more than zero", ""),
    ("[simulation]", "[accept]\ncoverage_factor = 0.5\n[simulation]", "accept.coverage_factor",
     "from 1 to 10", ""),
    ("[simulation]", '[records]\nurl = "logs"\n[simulation]', "records.url", "sqlite:///", ""),
    ("[simulation]", '[records]\nurl = "mysql://x/y"\n[simulation]', "records.url", "sqlite", ""),
    ("[simulation]", '[records]\nurl = "sqlite:///:memory:"\n[simulation]', "records.url",
     "kept in a file", ""),
    ("[simulation]", '[changer]\ndriver = "simulated"\n[simulation]', 'source "white".position',
     "required", ""),
    ("[simulation]", "[simulatoin]\n[simulation]", "simulatoin", "no such key", "simulation"),
    ("[simulation]", "[simulation]\nseed = -1", "simulation.seed", "whole number", ""),
    ("[simulation]", "[simulation]\nseed = 1.5", "simulation.seed", "whole number", ""),
    ('[simulation]\nworld = "world.toml"', "", "[simulation]", "simulated devices need it", ""),
    ('"world.toml"', '"nix.toml"', "simulation.world", "not there", ""),
    ("[simulation]", "[signal]\n[simulation]", "signal", "reserved for later", ""),
    ("[simulation]", "[reference]\n[simulation]", "reference", "reserved for later", ""),
    ("[simulation]", "[[mount]]\n[simulation]", "mount", "reserved for later", ""),
    ("path_factor = 2", 'path_factor = 2\npath_table = "a"', "bench.path_table", "reserved", ""),
    ('[stage]\n', '[stage]\nrole = "coarse"\n', "stage.role", "reserved for later", ""),
    ("[stage]", "[[stage]]", "stage", "more than one stage is reserved for later", ""),
    ("[detector]", "[[detector]]", "detector", "more than one detector is reserved", ""),
    ("[[source]]", "[source]", "source", "[[source]]", ""),
]  # fmt: skip


@pytest.mark.parametrize(("old", "new", "path", "said", "near"), CHANGED)
def test_one_thing_wrong_is_one_problem(
    tmp_path: Path, old: str, new: str, path: str, said: str, near: str
) -> None:
    assert SMALL.count(old) == 1, "the test must change what it means to"
    (problem,) = problems(tmp_path, SMALL.replace(old, new))
    assert problem.path == path
    assert said in problem.allowed
    assert problem.nearest == near or not near
    assert problem.line()


def test_the_good_file_is_good(tmp_path: Path) -> None:
    assert load(tmp_path, SMALL)


def test_all_problems_of_a_file_at_once(tmp_path: Path) -> None:
    text = SMALL
    for old, new, *_ in (
        ("path_factor = 2", "path_factor = 0"),
        ('["0 mm", "25 mm"]', '["25 mm", "0 mm"]'),
        ('[stage]\ndriver = "simulated"', '[stage]\ndriver = "simulatd"\nrole = "coarse"'),
        ('"1 kHz"', '"nan kHz"\nsettings = { memry = 5 }'),
        ('"60 nm"', '"60 V"'),
        ("[simulation]", '[glass]\nmaterial = "BK7"\n[mount]\n[simulatoin]\n[simulation]'),
        ('"world.toml"', '"nix.toml"'),
    ):
        text = text.replace(old, new)
    found = {problem.path for problem in problems(tmp_path, text)}
    assert found == {
        "bench.path_factor", "stage.travel", "stage.driver", "stage.role", "detector.rate",
        "detector.settings.memry", 'source "white".spectrum.fwhm', "glass.material", "mount",
        "simulatoin", "simulation.world",
    }  # fmt: skip


def test_two_sources_of_one_name(tmp_path: Path) -> None:
    again = SMALL[SMALL.index("[[source]]") : SMALL.index("[simulation]")]
    (problem,) = problems(tmp_path, SMALL.replace("[simulation]", again + "[simulation]"))
    assert problem.path == "source 2.name"
    assert "source 1 has" in problem.allowed


def test_an_empty_table_lists_what_is_required(tmp_path: Path) -> None:
    found = [problem.path for problem in problems(tmp_path, "[bench]\n")]
    assert found == ["bench.name", "bench.path_factor", "[stage]", "[detector]", "[[source]]"]


def test_a_seed_of_the_command_line_is_checked(tmp_path: Path) -> None:
    (problem,) = problems(tmp_path, SMALL, seed=-1)
    assert problem.path == "--seed"


def test_a_broken_plug_in_is_a_problem_of_its_table(tmp_path: Path) -> None:
    def declared(kind: str, name: str) -> Any:
        if kind == "stage":
            raise ImportError("the stage driver 'simulated' cannot be used: no module")
        return registry.declared(kind, name)

    (problem,) = problems(tmp_path, SMALL, declared=declared)
    assert problem.path == "stage.driver"
    assert "cannot be used" in problem.allowed


def test_real_devices_need_no_world(tmp_path: Path) -> None:
    real = SimpleNamespace(name="x", simulated=False, settings=(), world=())
    text = SMALL.replace('[simulation]\nworld = "world.toml"', "")
    spec: Any = load(tmp_path, text, declared=lambda kind, name: real)
    assert spec.simulation is None
    assert not spec.simulated


@pytest.mark.parametrize(
    ("content", "said", "why"),
    [
        (b"", "is empty", ""),
        (b" \n\n", "is empty", ""),
        (b"# only a comment\n", "holds no tables", ""),
        (b"\x7fELF\x00\x01\x02", "is not a text file", ""),
        (b'[bench]\nname = "M\xfcller"\n', "is not UTF-8", "0xfc"),
        (b"[bench\n", "is not valid TOML", "line 1, column"),
        (b'[bench]\nname = "a"\nname = "b"\n', "is not valid TOML", "line 3"),
        (b"a = " + b"[" * 51, "is nested too deep", "more than 50"),
        (b"a = " + b"[" * 5000, "is nested too deep", "more than 50"),
        (b"a = " + b"{a=[" * 5000, "is nested too deep", "more than 50"),
        (b"a" + b".a" * 5000 + b" = 1", "is nested too deep", "more than 50"),
        (b"a = " + b"[" * 50, "is not valid TOML", "end of document"),
        (
            b'a = "' + b"[" * 500 + b'" # ' + b"[" * 500 + b"\nb = 1 2",
            "is not valid TOML",
            "line 2",
        ),
        (b"a = " + b"9" * 5000, "is not valid TOML", ""),
        (b"a = 1\n" * 200_000, "is too large", "1200000 bytes"),
    ],
)
def test_files_that_are_no_description(tmp_path: Path, content: bytes, said: str, why: str) -> None:
    with pytest.raises(InputError, match=said) as caught:
        load(tmp_path, content)
    assert why in str(caught.value)
    assert str(tmp_path / "bench.toml") in caught.value.where
    assert len(caught.value.lines()) <= 4


def test_missing_file_folder_and_pipe(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="not there") as caught:
        load_bench(tmp_path / "nix.toml", declared=registry.declared)
    assert "evenarm new" in caught.value.mend
    with pytest.raises(InputError, match="is a folder"):
        load_bench(tmp_path, declared=registry.declared)
    (tmp_path / "bench.toml").write_text("")
    with pytest.raises(InputError, match="is a folder") as caught:
        load_bench(tmp_path, declared=registry.declared)
    assert str(tmp_path / "bench.toml") in caught.value.mend
    os.mkfifo(tmp_path / "pipe.toml")
    with pytest.raises(InputError, match="not a regular file"):
        load_bench(tmp_path / "pipe.toml", declared=registry.declared)
    with pytest.raises(InputError):
        load_bench(tmp_path / ("x" * 5000), declared=registry.declared)


def test_every_key_has_words_for_people() -> None:
    for name, table in TABLES.items():
        for key, field in table.model_fields.items():
            assert field.description, f"{name}.{key}"


def test_reading_a_bench_imports_neither_pint_nor_a_screen() -> None:
    code = (
        "import sys; from pathlib import Path; from bench.spec import find_bench, load_bench;"
        "from drivers import registry;"
        "load_bench(find_bench(None, Path('/nowhere')).path, declared=registry.declared);"
        "print(*({'pint', 'scipy', 'textual', 'sqlalchemy'} & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], check=False, capture_output=True, text=True)
    assert (done.returncode, done.stdout.strip()) == (0, "")


scalars = st.one_of(
    st.integers(), st.floats(), st.booleans(), st.text(max_size=8), st.just("1 mm"), st.just("x")
)
values = st.recursive(
    scalars,
    lambda inner: (
        st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=5), inner, max_size=3)
    ),
    max_leaves=6,
)
keys = st.sampled_from(sorted({key for table in TABLES.values() for key in table.model_fields}))
tables = st.dictionaries(
    st.sampled_from([*TABLES, "mount", "signal", "x"]),
    values | st.dictionaries(keys, values, max_size=6) | st.lists(
        st.dictionaries(keys, values, max_size=6), max_size=2
    ),
    min_size=1,
)  # fmt: skip


@given(tables)
@settings(max_examples=60, deadline=None)
def test_any_tree_of_tables_is_read_or_refused(tree: dict[str, Any]) -> None:
    from bench.spec import load as module

    def given_tree(path: Path, what: str, mend: str) -> tuple[dict[str, Any], str]:
        return {**tree}, ""

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(module, "read_toml", given_tree)
        with contextlib.suppress(EvenarmError):
            load_bench(Path("bench.toml"), declared=registry.declared)


def with_stage(*lines: str) -> str:
    return SMALL.replace('speed = "1 mm/s"', "\n".join(('speed = "1 mm/s"', *lines)))


# Six widths of the packet of a Gaussian of 600 nm and 60 nm, from its coherence length by the
# closed form 4 ln 2 / pi l1 l2 / (l2 - l1) with l = 570 nm and 630 nm (Goodman, Statistical Optics,
# 5.1), at two lengths of OPD for one of reading: 15.8 um.
SIX_PACKETS_M = 6 * 0.882542 * 570e-9 * 630e-9 / 60e-9 / 2


@pytest.mark.parametrize("allowance_m", [0.0, 5e-6, 20e-6, 1e-3])
def test_a_longest_move_into_which_no_scan_fits(tmp_path: Path, allowance_m: float) -> None:
    least_m = allowance_m + SIX_PACKETS_M
    allowance = f'reversal_allowance = "{allowance_m * 1e6:.6f} um"'
    short, enough = (f'longest_move = "{least_m * part * 1e6:.6f} um"' for part in (0.99, 1.01))
    (problem,) = problems(tmp_path, with_stage(allowance, short))
    assert problem.path == "stage.longest_move"
    assert problem.value.strip('"') in short
    assert "no scan fits: must be at least" in problem.allowed
    load(tmp_path, with_stage(allowance, enough))


def test_the_shortest_packet_counts(tmp_path: Path) -> None:
    narrow = """
[[source]]
name = "narrow"
spectrum = { shape = "gaussian", centre = "600 nm", fwhm = "1 nm" }
signal = "1 V"
"""
    move = 'longest_move = "60 um"'
    load(tmp_path, with_stage(move) + narrow)
    alone = with_stage(move).replace('fwhm = "60 nm"', 'fwhm = "1 nm"')
    (problem,) = problems(tmp_path, alone)
    assert problem.path == "stage.longest_move"


@pytest.mark.parametrize(
    ("old", "new"),
    [
        ('"25 mm"]', '"30 um"]'),  # the travel is what is short, and a stage may have no play
        ('fwhm = "60 nm"', 'fwhm = "1 MHz"'),  # a laser alone: no packet fits into the travel
    ],
)
def test_what_the_travel_does_not_allow_is_left_to_the_plan(
    tmp_path: Path, old: str, new: str
) -> None:
    assert old in SMALL
    load(tmp_path, SMALL.replace(old, new))


def test_no_packet_is_measured_with_a_path_factor_that_cannot_be(tmp_path: Path) -> None:
    text = with_stage('longest_move = "25 um"', 'reversal_allowance = "0 um"')
    load(tmp_path, text)
    found = problems(tmp_path, text.replace("path_factor = 2", "path_factor = 0"))
    assert [problem.path for problem in found] == ["bench.path_factor"]


def test_the_plan_draws_scans_of_the_length_that_is_asked_for() -> None:
    assert 2 * FINAL_ROOM == SCAN_PACKETS


FAULTY_ALL_OVER = """
[bench]
name = "small"
path_factor = 2
colour = 5
reference_wavelength = "600 nm"
[stage]
driver = "simulatd"
travel = ["0 mm", "25 mm"]
longest_move = "5"
approach = "up"
[detector]
driver = "simulated"
rate = "1 kHz"
integration = "2 ms"
lag = "nix"
[[source]]
name = "halogen"
spectrum = { shape = "gaussian", centre = "600 nm", fwhm = "60 nm" }
laser_class = 1
[[source]]
name = "halogen"
spectrum = { shape = "gaussian", centre = "600 nm", fwhm = "60 nm" }
signal = "1 A"
[expect]
zero = "30 mm"
half_width = "5"
[glass]
material = "butter"
[simulation]
world = "world.toml"
"""


def test_a_faulty_key_hides_no_fault_of_another(tmp_path: Path) -> None:
    found = {problem.path: problem for problem in problems(tmp_path, FAULTY_ALL_OVER)}
    assert set(found) == {
        "bench.colour", "stage.driver", "stage.speed", "stage.longest_move", "stage.approach",
        "detector.integration", "detector.lag", "source 1.signal", "source 1.laser_class",
        "source 2.name", "expect.zero", "expect.half_width", "glass.material",
    }  # fmt: skip
    assert 'such as "5 mm"' in found["stage.longest_move"].allowed
    assert 'laser_class = "1"' in found["source 1.laser_class"].allowed
    lines = FAULTY_ALL_OVER.splitlines()
    for path, problem in found.items():
        assert problem.at_line is not None, path
        line = lines[problem.at_line - 1]
        assert line.startswith((path.rpartition(".")[2], "[stage]", "[[source]]")), path
        assert problem.line().startswith(f"line {problem.at_line}: {path} = ")


def test_no_lines_are_told_where_they_cannot_be_told_simply() -> None:
    text = '[a]\nb = """\nc = 1\n"""\nc = 2\n'
    assert line_of(text, "a.c", {}) is None
    assert line_of("[a]\nb.c = 1 # d\n'e' = 2\n", "a.b.c", {}) == 2
    assert line_of("[a]\nb.c = 1 # d\n'e' = 2\n", "a.e[1]", {}) == 3
    assert line_of("[a]\nb = 1\n", "[c]", {}) is None


def test_the_text_fits_a_screen_and_the_document_holds_all(tmp_path: Path) -> None:
    text = SMALL + "".join(f"[unknown{i}]\n" for i in range(40))
    with pytest.raises(SpecError) as caught:
        load(tmp_path, text)
    assert len(caught.value.problems) == 40
    lines = caught.value.lines()
    assert 12 <= len(lines) < 24
    assert sum(-(-len(line) // 80) for line in lines) <= 24
    assert "more; `evenarm check --json` names them all" in lines[-2]
