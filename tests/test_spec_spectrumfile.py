"""Spectra of sources as files."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from bench.errors import InputError, SpecError
from bench.optics.spectra import tabulated
from bench.spec import for_drivers, load_bench
from bench.spec.spectrumfile import read_spectrum
from drivers import registry

# CIE standard illuminant A at five wavelengths (CIE 15, table of relative spectral power).
ILLUMINANT_A = {400: 14.7080, 500: 59.8611, 560: 100.0, 600: 129.043, 700: 198.261}


def read(folder: Path, text: str) -> tuple[np.ndarray, np.ndarray]:
    (folder / "lamp").write_text(text, encoding="utf-8")
    return read_spectrum(folder / "lamp")


@pytest.mark.parametrize(
    ("header", "row"),
    [
        ("wavelength [nm],power", "{},{}"),
        ("Wavelength (nm),Power (a.u.)", "{},{}"),
        ("wavelength_nm,power", "{},{}"),
        ("wavelength [nm]\tpower", "{}\t{}"),
        ("wavelength [nm];power", "{};{}"),
        ('"wavelength [nm]","power"', "{},{}"),
    ],
)
def test_csv(tmp_path: Path, header: str, row: str) -> None:
    rows = [row.format(*pair) for pair in ILLUMINANT_A.items()]
    wavelength_m, power = read(tmp_path, "\n".join(["# lamp", header, "", *rows, ""]))
    assert wavelength_m == pytest.approx(np.array([*ILLUMINANT_A]) * 1e-9)
    assert power == pytest.approx(np.array([*ILLUMINANT_A.values()]) / 198.261)


def test_csv_with_decimal_commas_and_in_any_order(tmp_path: Path) -> None:
    wavelength_m, power = read(tmp_path, "wavelength [um];power\n0,7;198,261\n0,4;14,7080\n")
    assert wavelength_m == pytest.approx([0.4e-6, 0.7e-6])
    assert power == pytest.approx([14.708 / 198.261, 1.0])


def test_noise_below_zero_is_no_light(tmp_path: Path) -> None:
    _, power = read(tmp_path, "wavelength [nm],power\n400,-0.1\n500,2\n600,-1e-3\n")
    assert power.tolist() == [0.0, 1.0, 0.0]


def test_a_wavenumber_axis_is_a_density_per_wavenumber(tmp_path: Path) -> None:
    text = "wavenumber [1/cm],power\n" + "\n".join(f"{s},1" for s in range(14000, 20001, 500))
    wavelength_m, power = read(tmp_path, text)
    spectrum = tabulated(wavelength_m, power)
    # Flat per wavenumber: the mean wavenumber is the middle of the band.
    assert spectrum.mean_wavenumber == pytest.approx(17000e2, rel=1e-12)
    assert np.ptp(spectrum.power) == pytest.approx(0.0, abs=1e-12 * np.max(spectrum.power))


JCAMP = """##TITLE= lamp
##JCAMP-DX= 4.24 $$ a comment
##DATA TYPE= EMISSION SPECTRUM
##ORIGIN= here
##X UNITS= NANOMETERS
##YUNITS= ARBITRARY UNITS
##FIRSTX= 500
##LASTX= 504
##NPOINTS= 5
##XFACTOR= 1
##YFACTOR= 0.5
##XYDATA= (X++(Y..Y))
500 2 4+6
503 8-2
##END=
"""


def test_jcamp_dx_xydata(tmp_path: Path) -> None:
    # The form of JCAMP-DX 4.24 with plain numbers, signs as separators (McDonald and Wilks 1988).
    wavelength_m, power = read(tmp_path, JCAMP)
    assert wavelength_m == pytest.approx(np.array([500, 501, 502, 503, 504]) * 1e-9)
    assert power == pytest.approx([0.25, 0.5, 0.75, 1.0, 0.0])


def test_jcamp_dx_xypoints(tmp_path: Path) -> None:
    text = (
        JCAMP[: JCAMP.index("##XYDATA")] + "##XYPOINTS= (XY..XY)\n500, 1; 510, 2\n520,1\n##END=\n"
    )
    wavelength_m, power = read(tmp_path, text)
    assert wavelength_m == pytest.approx(np.array([500, 510, 520]) * 1e-9)
    assert power == pytest.approx([0.5, 1.0, 0.5])


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("", "is empty"),
        ("# nothing\n", "has no rows"),
        ("wavelength,power\n500,1\n600,2\n", "in what unit"),
        ("500,1\n600,2\n", "in what unit"),
        ("wavelength [V],power\n500,1\n600,2\n", "in what unit"),
        ("wavelength [nm],power\n500,1\n", "fewer than two"),
        ("wavelength [nm],power\n500,1\n600,x\n", "not two numbers"),
        ("wavelength [nm],power\n500,1\n600\n", "not two numbers"),
        ("wavelength [nm],power\n500,1\n600,nan\n", "not two numbers"),
        ("wavelength [nm],power\n500,1\n500,2\n", "twice"),
        ("wavelength [nm],power\n500,0\n600,-1\n", "no light"),
        ("wavelength [nm],power\n-500,1\n600,1\n", "cannot be"),
        ("wavelength [mm],power\n500,1\n600,1\n", "cannot be right"),
        ("wavelength [nm],power\n500,1e999\n600,1\n", "cannot be"),
        (JCAMP.replace("NANOMETERS", "SECONDS"), "cannot be used"),
        (JCAMP.replace("XYDATA", "RADATA"), "cannot be used"),
        (JCAMP.replace("ARBITRARY UNITS", "ABSORBANCE"), "not the spectrum of a source"),
        (JCAMP.replace("##NPOINTS= 5", "##NPOINTS= 9"), "cut short"),
        (JCAMP.replace("##FIRSTX= 500\n", ""), "lacks FIRSTX"),
        (JCAMP.replace("##YFACTOR= 0.5", "##YFACTOR= half"), "not a number"),
        (JCAMP.replace("500 2 4+6", "500B2J4"), "plain numbers"),
        (
            JCAMP.replace("XYDATA= (X++(Y..Y))", "XYPOINTS= (XY..XY)")
            .replace("4+6", "4 6 7")
            .replace("8-2", "8 2"),
            "second number",
        ),
    ],
)
def test_files_that_are_no_spectrum(tmp_path: Path, text: str, said: str) -> None:
    with pytest.raises(InputError, match=said) as caught:
        read(tmp_path, text)
    assert str(tmp_path) in caught.value.where


BENCH = """
[bench]
name = "small"
path_factor = 2
[stage]
driver = "simulated"
speed = "1 mm/s"
[detector]
driver = "simulated"
rate = "1 kHz"
[[source]]
name = "lamp"
spectrum = { file = "lamp.csv" }
signal = "1 V"
[simulation]
"""


@pytest.mark.parametrize("as_key", [False, True])
def test_a_source_from_a_file(tmp_path: Path, as_key: bool) -> None:
    text = BENCH.replace('spectrum = { file = "lamp.csv" }', 'file = "lamp.csv"')
    (tmp_path / "bench.toml").write_text(text if as_key else BENCH)
    (tmp_path / "world.toml").write_text('[truth]\nzero = "0 mm"\n')
    with pytest.raises(SpecError) as caught:
        load_bench(tmp_path / "bench.toml", declared=registry.declared)
    (problem,) = caught.value.problems
    path = problem.path.partition(".")[0]
    assert path.startswith("source ")
    assert problem.path == (f"{path}.file" if as_key else f"{path}.spectrum.file")
    assert "not there" in problem.allowed
    (tmp_path / "lamp.csv").write_text("wavelength [nm],power\n500,0\n550,1\n600,1\n650,0\n")
    spec = load_bench(tmp_path / "bench.toml", declared=registry.declared)
    # Half power where the lines between the points cross it; linear in wavenumber here.
    low, high = spec.sources[0].band
    assert 600e-9 < 1 / low < 650e-9
    assert 500e-9 < 1 / high < 550e-9
    given = for_drivers(spec)["sources"][0]["spectrum"]
    assert given["wavelength_m"] == pytest.approx([500e-9, 550e-9, 600e-9, 650e-9])
    assert given["power"] == [0.0, 1.0, 1.0, 0.0]
