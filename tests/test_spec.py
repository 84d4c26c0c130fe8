"""bench.toml as it is understood."""

from __future__ import annotations

import json
import math
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from bench.errors import InputError, SpecError
from bench.spec import find_bench, for_drivers, load_bench
from bench.spec.model import BenchSpec
from drivers import registry

SHIPPED = find_bench(None, Path("/nowhere")).path
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
WORLD = '[truth]\nzero = "12.5 mm"\n'

Write = Callable[..., Path]


@pytest.fixture
def write(tmp_path: Path) -> Write:
    def write_bench(bench: str = SMALL, world: str | None = WORLD) -> Path:
        (tmp_path / "bench.toml").write_text(bench, encoding="utf-8")
        if world is not None:
            (tmp_path / "world.toml").write_text(world, encoding="utf-8")
        return tmp_path / "bench.toml"

    return write_bench


def load(path: Path, **more: Any) -> BenchSpec:
    return load_bench(path, declared=registry.declared, known_drivers=registry.names, **more)


def test_the_shipped_bench_is_whole() -> None:
    spec = load(SHIPPED)
    assert spec.simulated
    assert spec.path_factor == 2
    assert spec.opd_per_m == pytest.approx(2 * 1.00027)
    assert spec.reference_wavelength_m == 600e-9
    assert spec.stage.travel_m == (0.0, 0.025)
    assert spec.stage.longest_move_m == 5e-3
    assert spec.detector.unit == "V"
    assert spec.detector.range == (0.0, 5.0)
    assert spec.expect is not None
    assert (spec.expect.zero_m, spec.expect.half_width_m) == (12.5e-3, 5e-3)
    assert [source.name for source in spec.sources] == ["white", "filter 10 nm", "filter 2 nm"]
    assert spec.world["truth.zero"] == (11.5e-3, 13.5e-3)
    assert spec.world["stage.reversal_error"] == 8e-6
    assert spec.world["fault"] == []
    assert spec.simulation is not None
    assert spec.simulation.seed == 7


def test_sources_are_sampled_per_wavenumber(write: Write) -> None:
    (source,) = load(write()).sources
    assert np.all(np.diff(source.wavenumber) > 0)
    assert source.wavenumber.shape == source.power.shape
    # Half-power points at the wavelengths centre +- fwhm/2, by the definition of the file.
    assert source.band == pytest.approx((1 / 630e-9, 1 / 570e-9), rel=1e-6)
    # l1 l2 / (l2 - l1); and for a Gaussian the FWHM of the degree of coherence is 0.882542 of it
    # (Mandel 1959, Proc. Phys. Soc. 74, 233; Goodman, Statistical Optics, 5.1).
    assert source.coherence_rule_m == pytest.approx(630e-9 * 570e-9 / 60e-9, rel=1e-6)
    assert source.coherence_fwhm_m == pytest.approx(0.882542 * source.coherence_rule_m, rel=5e-5)
    assert source.coherence_integral_m == pytest.approx(
        0.664283 * source.coherence_rule_m, rel=5e-5
    )


def test_defaults_are_those_documented(write: Write) -> None:
    spec = load(write())
    assert (spec.accept.residual_opd_m, spec.accept.scans_agree_m) == (200e-9, 100e-9)
    assert spec.accept.coverage_factor == 2
    assert spec.stage.approach == "increasing"
    assert spec.stage.longest_move_m == 5e-3
    assert spec.detector.integration_s == pytest.approx(1e-3)
    assert spec.detector.lag_s == 0
    assert (spec.detector.range, spec.detector.dark, spec.detector.noise) == (None, None, None)
    assert spec.expect is None
    assert spec.glass is None
    assert spec.safety_contact is None
    assert not spec.allow_unattended
    assert spec.sources[0].laser_class is None
    assert spec.simulation is not None
    assert spec.simulation.seed == 0
    assert spec.air_index == 1.00027


def test_no_travel_is_a_bench_that_cannot_move(write: Write) -> None:
    spec = load(write(SMALL.replace('travel = ["0 mm", "25 mm"]', "")))
    assert spec.stage.travel_m is None


def test_longest_move_defaults_to_a_short_travel(write: Write) -> None:
    spec = load(write(SMALL.replace('"25 mm"]', '"2 mm"]')))
    assert spec.stage.longest_move_m == pytest.approx(2e-3)


@pytest.mark.parametrize(
    ("words", "factor"),
    [
        # OPD is arm A minus arm B: it grows where A gets longer or B gets shorter.
        ('moving_arm = "A"\nincreasing = "longer"', 2.0),
        ('moving_arm = "A"\nincreasing = "shorter"', -2.0),
        ('moving_arm = "B"\nincreasing = "longer"\nfolds = 4', -4.0),
        ('moving_arm = "B"\nincreasing = "shorter"\nfolds = 1.5', 1.5),
        ("path_factor = -2", -2.0),
    ],
)
def test_the_sign_of_the_path_factor(write: Write, words: str, factor: float) -> None:
    spec = load(write(SMALL.replace("path_factor = 2", words)))
    assert spec.path_factor == factor
    assert spec.opd_per_m == pytest.approx(1.00027 * factor)


def test_a_laser_may_have_its_width_in_hertz(write: Write) -> None:
    text = SMALL.replace(
        'shape = "gaussian", centre = "600 nm", fwhm = "60 nm"',
        'shape = "lorentzian", centre = "632.9912 nm", fwhm = "1 MHz"',
    )
    (source,) = load(write(text)).sources
    low, high = source.band
    assert (high - low) * 299792458.0 == pytest.approx(1e6, rel=1e-3)
    # c over 1 MHz is 299.79 m; the Lorentzian's FWHM is 0.441271 of it (Goodman, 5.1).
    assert source.coherence_rule_m == pytest.approx(299.792458, rel=1e-3)
    assert source.coherence_fwhm_m == pytest.approx(0.441271 * 299.792458, rel=2e-3)


def test_a_broad_width_in_hertz_has_the_edges_of_the_file(write: Write) -> None:
    width_hz = 299792458.0 * (1 / 570e-9 - 1 / 630e-9)
    text = SMALL.replace('fwhm = "60 nm"', f'fwhm = "{width_hz / 1e12!r} THz"')
    assert load(write(text)).sources[0].band == pytest.approx((1 / 630e-9, 1 / 570e-9), rel=1e-6)


def test_a_black_body(write: Write) -> None:
    text = SMALL.replace(
        '{ shape = "gaussian", centre = "600 nm", fwhm = "60 nm" }',
        '{ shape = "blackbody", temperature = "2856 K", band = ["420 nm", "900 nm"] }',
    )
    spec = load(write(text))
    assert 600e-9 < spec.sources[0].mean_wavelength_m < 900e-9
    spectrum = for_drivers(spec)["sources"][0]["spectrum"]
    assert spectrum["temperature_k"] == 2856.0
    assert tuple(spectrum["band_m"]) == (420e-9, 900e-9)


def test_a_climate_gives_the_air_by_ciddor(write: Write) -> None:
    text = SMALL.replace("path_factor = 2", 'path_factor = 2\nreference_wavelength = "633 nm"') + (
        '[climate]\ntemperature = "20 degC"\npressure = "100 kPa"\nhumidity = "100 %"\n'
    )
    # Ciddor 1996, Appl. Opt. 35, 1566, at 450 ppm CO2: 1.000267394.
    assert load(write(text)).air_index == pytest.approx(1.000267394, abs=2e-9)


def test_a_zero_with_its_uncertainty_is_a_normal_prior(write: Write) -> None:
    spec = load(write(SMALL + '[expect]\nzero = "12.5(5) mm"\n'))
    assert spec.expect is not None
    assert spec.expect.half_width_m is None
    assert spec.expect.standard_uncertainty_m == pytest.approx(0.5e-3)


def test_the_detector_may_count(write: Write) -> None:
    text = SMALL.replace('signal = "1 V"', 'signal = "900 counts"').replace(
        'rate = "1 kHz"', 'rate = "1 kHz"\nrange = ["0 counts", "4095 counts"]'
    )
    spec = load(write(text, WORLD + '[detector]\nnoise = "3 counts"\n'))
    assert spec.detector.unit == "counts"
    assert spec.detector.range == (0.0, 4095.0)
    assert spec.world["detector.noise"] == 3.0


def test_a_changer_and_its_settings(write: Write) -> None:
    text = SMALL.replace('signal = "1 V"', 'signal = "1 V"\nposition = "3"') + (
        '[changer]\ndriver = "simulated"\n[changer.settings]\nchange_time = "500 ms"\n'
    )
    spec = load(write(text))
    assert spec.changer == {"driver": "simulated", "settings": {"change_time": 0.5}}
    assert spec.sources[0].position == "3"


def test_records_are_beside_the_bench_unless_told_otherwise(write: Write, tmp_path: Path) -> None:
    path = write()
    assert load(path).records_url == f"sqlite:///{tmp_path / 'logs/journal.sqlite3'}"
    elsewhere = load(path, records_folder=tmp_path / "here")
    assert elsewhere.records_url == f"sqlite:///{tmp_path / 'here/journal.sqlite3'}"
    absolute = load(write(SMALL + '[records]\nurl = "sqlite:////var/log/j.sqlite3"\n'))
    assert absolute.records_url == "sqlite:////var/log/j.sqlite3"
    server = load(write(SMALL + '[records]\nurl = "postgresql+psycopg://lab/records"\n'))
    assert server.records_url == "postgresql+psycopg://lab/records"


def test_the_seed_may_be_given(write: Write) -> None:
    spec = load(write(), seed=11)
    assert spec.simulation is not None
    assert spec.simulation.seed == 11
    assert for_drivers(spec)["seed"] == 11


def test_a_byte_order_mark_and_windows_lines_are_fine(write: Write) -> None:
    path = write()
    path.write_bytes(b"\xef\xbb\xbf" + SMALL.replace("\n", "\r\n").encode())
    assert load(path).name == "small"


def test_what_drivers_are_given_is_plain(write: Write) -> None:
    given = for_drivers(load(SHIPPED))
    assert json.loads(json.dumps(given))["stage"]["travel_m"] == [0.0, 0.025]
    assert given["opd_per_m"] == pytest.approx(2.00054)
    assert given["sources"][1]["spectrum"] == {
        "shape": "gaussian",
        "centre_m": 600e-9,
        "fwhm_m": 10e-9,
    }
    assert given["world"]["drift.path"] == pytest.approx(10e-9 / 60)


def test_the_hash_is_of_the_bytes(write: Write) -> None:
    import hashlib

    path = write()
    assert load(path).sha256 == hashlib.sha256(path.read_bytes()).hexdigest()


def test_which_bench_is_found(write: Write, tmp_path: Path) -> None:
    assert find_bench(None, tmp_path).shipped
    path = write()
    assert find_bench(None, tmp_path) == type(find_bench(None, tmp_path))(path, False)
    assert find_bench(Path("other.toml"), tmp_path).path == tmp_path / "other.toml"
    # A name that leads nowhere is an error of its own, not a reason to use another bench.
    path.unlink()
    path.symlink_to(tmp_path / "gone.toml")
    assert not find_bench(None, tmp_path).shipped
    with pytest.raises(InputError, match="not there"):
        load(path)


def test_the_world_is_read_as_declared(write: Write) -> None:
    world = """
    [truth]
    zero = { uniform = ["12 mm", "13 mm"] }
    glass = { material = "N-BK7", thickness = "0.05 mm" }
    [[source]]
    name = "white"
    level = "2 V"
    [stage]
    periodic_error = { amplitude = "0.2 um", period = "1 mm" }
    scale_error = 1e-5
    [[fault]]
    kind = "detector silent"
    at = "12 s"
    lasts = "2 s"
    """
    found = load(write(world=world)).world
    assert found["truth.zero"] == (12e-3, 13e-3)
    assert found["truth.glass.thickness"] == 0.05e-3
    assert found["source"] == [{"name": "white", "level": 2.0}]
    assert found["stage.periodic_error.amplitude"] == pytest.approx(0.2e-6)
    (fault,) = found["fault"]
    assert (fault["kind"], fault["at"], fault["lasts"]) == ("detector silent", 12.0, 2.0)


@pytest.mark.parametrize(
    ("world", "path", "allowed", "near"),
    [
        ("[truth]\n", "truth.zero", "required", ""),
        ('[truth]\nzero = "5 V"\n', "truth.zero", "not a length", ""),
        ("[truth]\nzero = 5\n", "truth.zero", "no unit", ""),
        ("truth = 5\n", "truth", "must be a table", ""),
        (WORLD + 'contrst = 0.5\n', "truth.contrst", "no such key", "contrast"),
        (WORLD + "contrast = 1.5\n", "truth.contrast", "from 0 to 1", ""),
        (WORLD + "contrast = nan\n", "truth.contrast", "finite number", ""),
        (WORLD + 'contrast = "0.5"\n', "truth.contrast", "finite number", ""),
        (WORLD + '[truht]\nzero = "1 mm"\n', "truht", "no such key", "truth"),
        (WORLD + '[stage]\nhomed = "yes"\n', "stage.homed", "true or false", ""),
        (WORLD + "[stage]\nhomed = { uniform = [0, 1] }\n", "stage.homed", "true or false", ""),
        (WORLD + "[detector]\nadc_bits = 1.5\n", "detector.adc_bits", "whole number", ""),
        (WORLD + "[detector]\nadc_bits = { uniform = [1, 2] }\n", "detector.adc_bits", "one", ""),
        (WORLD + '[stage]\nreversal_error = { uniform = ["1 um"] }\n', "stage.reversal_error",
         "uniform = [lower, upper]", ""),
        (WORLD + '[stage]\nreversal_error = { uniform = ["2 um", "1 um"] }\n',
         "stage.reversal_error", "lower end", ""),
        (WORLD + '[detector]\nnoise = "5 nA"\n', "detector.noise", "not a voltage", ""),
        (WORLD + "fault = 5\n", "truth.fault", "no such key", ""),
        (WORLD + '[fault]\nkind = "x"\n', "fault", "[[fault]]", ""),
        (WORLD + '[[fault]]\nkind = "detector silnt"\nat = "1 s"\n', "fault 1.kind", "one of",
         "detector silent"),
        (WORLD + '[[fault]]\nkind = "lamp out"\n', "fault 1.at", "required", ""),
        (WORLD + '[[source]]\nname = "whit"\n', 'source "whit".name', "no [[source]]", "white"),
        (WORLD + 'glass = { material = "NBK7", thickness = "1 mm" }\n', "truth.glass.material",
         "one of", "N-BK7"),
    ],
)  # fmt: skip
def test_a_world_that_cannot_be(
    write: Write, world: str, path: str, allowed: str, near: str
) -> None:
    with pytest.raises(SpecError) as caught:
        load(write(world=world))
    (problem,) = caught.value.problems
    assert problem.path == f"world.toml: {path}"
    assert allowed in problem.allowed
    if near:
        assert near in problem.nearest


def test_coherence_lengths_of_every_shape_are_finite(write: Write) -> None:
    for shape in ("gaussian", "lorentzian", "rectangular"):
        (source,) = load(write(SMALL.replace("gaussian", shape))).sources
        for length in (
            source.coherence_rule_m, source.coherence_fwhm_m, source.coherence_integral_m
        ):  # fmt: skip
            assert math.isfinite(length)
