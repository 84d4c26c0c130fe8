"""Scan files as people write them: units, separators, comments, bad rows and useless files."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from bench.errors import ScanFileError
from bench.scanfile import ScanOptions, read_scan_file

AIR = 1.00027  # index of air where no climate is known


def write(tmp_path: Path, text: str | bytes, name: str = "scan.csv") -> Path:
    path = tmp_path / name
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return path


def rows(separator: str = ",", count: int = 4, comma: bool = False) -> str:
    lines = [f"{i + 0.5}{separator}{2.0 + 0.25 * i}" for i in range(count)]
    return "\n".join(lines).replace(".", ",") if comma else "\n".join(lines)


def test_the_documented_form(tmp_path: Path) -> None:
    text = "# path_factor = 2\n# at_wavelength = 600 nm\n# material = n-bk7\n"
    text += "position [um],signal [V]\n3761.50780,1.641478\n3761.6,1.7\n"
    found = read_scan_file(write(tmp_path, text))
    assert found.axis == "position"
    assert found.unit == "um"
    assert found.signal_unit == "V"
    assert found.scan.x == pytest.approx([3761.50780e-6, 3761.6e-6], rel=1e-14)
    assert found.scan.signal == pytest.approx([1.641478, 1.7])
    assert found.scan.opd_per_x == pytest.approx(2.0 * AIR)
    assert found.knowledge.at_wavelength_m == pytest.approx(600e-9)
    assert found.knowledge.glass == "N-BK7"
    assert found.bad_rows == ()


@pytest.mark.parametrize(
    ("header", "first_m"),
    [
        ("position [um],signal [V]", 0.5e-6),
        ("Position (mm),Signal (mV)", 0.5e-3),
        ("mirror_position_um,photodiode_V", 0.5e-6),
        ("mirror_position_nm,intensity", 0.5e-9),
        ("position_µm,detector1_counts", 0.5e-6),
        ("stage [in],voltage [V]", 0.5 * 25.4e-3),
        ('"position [um]","signal [V]"', 0.5e-6),
    ],
)
def test_headers_of_other_people(tmp_path: Path, header: str, first_m: float) -> None:
    found = read_scan_file(write(tmp_path, f"{header}\n{rows()}"))
    assert found.unit == "um"
    assert found.scan.x[0] == pytest.approx(first_m)
    assert found.scan.opd_per_x is None


@pytest.mark.parametrize("header", ["opd_um,signal", "OPD [um],signal [V]"])
def test_opd_in_place_of_position(tmp_path: Path, header: str) -> None:
    found = read_scan_file(write(tmp_path, f"# path_factor = 4\n{header}\n{rows()}"))
    assert found.axis == "opd"
    assert found.scan.opd_per_x == 1.0
    assert found.scan.x[0] == pytest.approx(0.5e-6)


def test_optional_columns_are_not_taken_for_the_signal(tmp_path: Path) -> None:
    text = (
        "time [s],reference [V],signal_b [V],signal [V],position [um]\n0,9,8,7,6\n1,9,8,7.5,6.5\n"
    )
    found = read_scan_file(write(tmp_path, text))
    assert found.scan.signal.tolist() == [7.0, 7.5]
    assert found.scan.x == pytest.approx([6e-6, 6.5e-6])


@pytest.mark.parametrize("header", ["position_microstep,detector1_counts", "position,signal"])
def test_counts_without_a_worth_stay_counts(tmp_path: Path, header: str) -> None:
    found = read_scan_file(write(tmp_path, f"{header}\n{rows()}"), ScanOptions(path_factor=2.0))
    assert found.unit == "counts"
    assert found.scan.x[0] == 0.5
    assert found.scan.opd_per_x is None


def test_what_a_count_is_worth_comes_with_its_uncertainty(tmp_path: Path) -> None:
    path = write(tmp_path, f"position_microstep,signal\n{rows()}")
    said = ScanOptions(position_unit="18.55(74) pm", path_factor=-2.0)
    found = read_scan_file(path, said)
    assert found.unit == "um"
    assert found.scan.x[0] == pytest.approx(0.5 * 18.55e-12)
    assert found.scan.opd_per_x == pytest.approx(-2.0 * AIR)
    assert found.scan.opd_per_x_relative_uncertainty == pytest.approx(0.74 / 18.55)
    opd = read_scan_file(path, ScanOptions(position_unit="37.1 pm", is_opd=True))
    assert opd.axis == "opd"
    assert opd.scan.opd_per_x == 1.0


def test_what_the_caller_says_wins(tmp_path: Path) -> None:
    text = f"# path_factor = 2\n# at_wavelength = 600 nm\n# material = CaF2\na,b,c\n1,2,3\n{rows()}"
    said = ScanOptions(
        position="b", signal="3", position_unit="1 um", path_factor=4, at="0,5 µm", material="N-BK7"
    )
    found = read_scan_file(write(tmp_path, text), said)
    assert found.scan.x.tolist() == [2e-6]
    assert found.scan.signal.tolist() == [3.0]
    assert found.scan.opd_per_x == pytest.approx(4.0 * AIR)
    assert found.knowledge.at_wavelength_m == pytest.approx(500e-9)
    assert found.knowledge.glass == "N-BK7"
    assert len(found.bad_rows) == 4


@pytest.mark.parametrize(
    ("text", "name"),
    [
        ("position [um];signal [V]\n" + rows(";", comma=True), "semicolons, decimal commas"),
        ("position [um];signal [V]\n" + rows(";"), "semicolons, points"),
        ("position [um]\tsignal [V]\n" + rows("\t"), "tabs"),
        ("position [um]\tsignal [V]\n" + rows("\t", comma=True), "tabs, decimal commas"),
        ("position_um   signal_V\n" + rows("   "), "blanks"),
        ("position [um] signal [V]\n" + rows(" "), "one blank"),
        (("position [um],signal [V]\n" + rows()).replace("\n", "\r\n"), "CRLF"),
        ("\n\n  \nposition [um],signal [V]\n\n" + rows() + "\n\n", "blank lines"),
        ("position [um] , signal [V]\n" + rows(" , "), "padded"),
        ("position [um],signal [V],\n" + rows().replace("\n", ",\n"), "a comma at the end"),
    ],
    ids=lambda value: value if "\n" not in value else "",
)
def test_separators(tmp_path: Path, text: str, name: str) -> None:
    found = read_scan_file(write(tmp_path, text))
    assert found.bad_rows == ()
    assert found.scan.x == pytest.approx(np.array([0.5, 1.5, 2.5, 3.5]) * 1e-6)
    assert found.scan.signal == pytest.approx([2.0, 2.25, 2.5, 2.75])


@pytest.mark.parametrize("encoding", ["utf-8-sig", "latin-1", "utf-16"])
def test_encodings(tmp_path: Path, encoding: str) -> None:
    text = f"# prüfstand\nposition [µm],signal [V]\n{rows()}"
    found = read_scan_file(write(tmp_path, text.encode(encoding)))
    assert found.unit == "um"
    assert found.scan.x[0] == pytest.approx(0.5e-6)


def test_bad_rows_are_named_and_left_out(tmp_path: Path) -> None:
    text = (
        "# comment\nposition [um],signal [V]\n1,2\nx,3\n2,nan\n3,inf\n4\n5,1_0\n\n# more\n6,7\n,\n"
    )
    found = read_scan_file(write(tmp_path, text))
    assert found.bad_rows == (4, 5, 6, 7, 8, 12)
    assert found.scan.x == pytest.approx([1e-6, 6e-6])


def test_a_dark_level_may_have_a_unit(tmp_path: Path) -> None:
    text = f"# dark = 20 mV\nposition [um],signal [mV]\n{rows()}"
    assert read_scan_file(write(tmp_path, text)).scan.dark == pytest.approx(20.0)
    text = f"# dark = 20 mV\nposition [um],signal [V]\n{rows()}"
    assert read_scan_file(write(tmp_path, text)).scan.dark == pytest.approx(0.02)


def test_the_bench_fills_what_the_file_leaves_open(tmp_path: Path) -> None:
    said = ScanOptions(
        opd_per_m=-2.0005, dark=0.1, range=(0.0, 2.5), signal_unit="V", at_wavelength_m=5e-7
    )
    found = read_scan_file(write(tmp_path, f"position [um],signal [V]\n{rows()}"), said)
    assert found.scan.opd_per_x == -2.0005
    assert found.scan.dark == 0.1
    assert found.scan.saturated is not None
    assert found.scan.saturated.tolist() == [False, False, True, True]
    other = read_scan_file(write(tmp_path, f"position [um],signal [mV]\n{rows()}"), said)
    assert other.scan.dark is None
    assert other.scan.saturated is None


# --- files that hold nothing usable ------------------------------------------------------------


@pytest.mark.parametrize(
    ("content", "said"),
    [
        (b"", "empty"),
        (b" \n\n ", "empty"),
        (b"# only = comments\n", "no rows"),
        (b"\x89PNG\r\n\x1a\n\x00\x00\x00\rIHDR" + bytes(range(32)), "not text"),
        (b"position [um],signal [V]\n", "two finite numbers"),
        (b"position [um],signal [V]\nnan,nan\nnan,nan\n", "two finite numbers"),
        (b"position [um],signal [V]\nhello,world\n", "two finite numbers"),
        (b"alpha,beta\n1,2\n", "recognised as the position"),
        (b"position [um],beta\n1,2\n", "recognised as the signal"),
        (b"1,2\n3,4\n", "recognised as the position"),
        (b"position [kg],signal [V]\n1,2\n", "not a length"),
        (b"position [wibble],signal [V]\n1,2\n", "not a unit"),
        (b"# path_factor = 0\nposition [um],signal [V]\n1,2\n", "path factor"),
        (b"# path_factor = two\nposition [um],signal [V]\n1,2\n", "path factor"),
        (b"# path_factor = nan\nposition [um],signal [V]\n1,2\n", "path factor"),
        (b"# at_wavelength = 600\nposition [um],signal [V]\n1,2\n", ""),
        (b"# at_wavelength = 600 V\nposition [um],signal [V]\n1,2\n", "not a length"),
        (b"# at_wavelength = 600 m\nposition [um],signal [V]\n1,2\n", "cannot be the wavelength"),
        (b"# material = butter\nposition [um],signal [V]\n1,2\n", "no formula"),
    ],
)
def test_useless_files_say_why_and_how_to_mend_it(
    tmp_path: Path, content: bytes, said: str
) -> None:
    with pytest.raises(ScanFileError) as caught:
        read_scan_file(write(tmp_path, content))
    error = caught.value
    assert said in error.what
    assert "scan.csv" in error.where
    assert error.mend
    assert len(error.lines()) <= 24


def test_missing_files_and_folders(tmp_path: Path) -> None:
    with pytest.raises(ScanFileError, match="no such file"):
        read_scan_file(tmp_path / "absent.csv")
    with pytest.raises(ScanFileError, match="folder"):
        read_scan_file(tmp_path)


def test_a_file_too_large_is_not_read(tmp_path: Path) -> None:
    path = tmp_path / "huge.csv"
    with path.open("wb") as stream:
        stream.truncate((256 << 20) + 1)
    with pytest.raises(ScanFileError, match="too large"):
        read_scan_file(path)


def test_an_unknown_column_lists_those_that_are_there(tmp_path: Path) -> None:
    path = write(tmp_path, "alpha,beta\n1,2\n")
    with pytest.raises(ScanFileError) as caught:
        read_scan_file(path, ScanOptions(position="gamma", signal="beta"))
    assert "'alpha', 'beta'" in caught.value.why
    assert "--position" in caught.value.mend


@pytest.mark.parametrize("unit", ["0 um", "-1 um", "5 V", "nan um", "wibble"])
def test_what_a_count_is_worth_must_be_a_length(tmp_path: Path, unit: str) -> None:
    path = write(tmp_path, f"position,signal\n{rows()}")
    with pytest.raises(ScanFileError):
        read_scan_file(path, ScanOptions(position_unit=unit))


@settings(max_examples=60, deadline=None)
@given(content=st.binary(max_size=300))
def test_any_bytes_are_read_or_refused(content: bytes, tmp_path_factory) -> None:
    path = tmp_path_factory.getbasetemp() / "fuzz.csv"
    path.write_bytes(content)
    try:
        found = read_scan_file(path)
    except ScanFileError:
        return
    assert np.all(np.isfinite(found.scan.x))


@settings(max_examples=40, deadline=None)
@given(
    values=st.lists(
        st.tuples(
            st.floats(-1e9, 1e9, allow_subnormal=False), st.floats(-1e9, 1e9, allow_subnormal=False)
        ),
        min_size=1,
        max_size=30,
    ),
    comma=st.booleans(),
)
def test_numbers_come_back_as_written(values, comma, tmp_path_factory) -> None:
    separator = ";" if comma else ","
    lines = [f"{a!r}{separator}{b!r}" for a, b in values]
    text = "\n".join(lines).replace(".", ",") if comma else "\n".join(lines)
    path = tmp_path_factory.getbasetemp() / "round.csv"
    path.write_text(f"position [m]{separator}signal\n{text}\n")
    found = read_scan_file(path)
    assert found.scan.x.tolist() == [a for a, _ in values]
    assert found.scan.signal.tolist() == [b for _, b in values]
