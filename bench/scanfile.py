"""Scan files: columns of text that somebody recorded, read into a scan and what is known of it.

A header names the columns and their units, comment lines may carry ``key = value``. What the file
leaves open may be said by the caller; what the caller says wins over the file.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from bench.errors import QuantityError, ScanFileError, printable
from bench.fringes.model import Knowledge, Scan

__all__ = ["ScanFile", "ScanOptions", "read_scan_file"]

AIR_INDEX = 1.00027
LARGEST_BYTES = 256 << 20
NAMED_ROWS = 8

_COMMENT = re.compile(r"#\s*([A-Za-z_]\w*)\s*[=:]\s*(.*?)\s*$")
_BRACKETS = re.compile(r"^(.*?)[\s_]*[\[(]\s*([^\])]*?)\s*[\])]\s*$")
_NUMBER = re.compile(r"^[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?$")
_POSITIONS = frozenset(
    [
        "position",
        "pos",
        "stage",
        "stage_position",
        "mirror_position",
        "mirror",
        "displacement",
        "motor_position",
    ]
)
_OPDS = frozenset(["opd", "path_difference", "optical_path_difference", "delay_length"])
_SIGNALS = ("signal", "photodiode", "detector", "intensity", "voltage", "power", "counts")
_LENGTHS = {"m": 1.0, "mm": 1e-3, "um": 1e-6, "µm": 1e-6, "μm": 1e-6, "nm": 1e-9, "pm": 1e-12}
_LENGTHS |= {"cm": 1e-2, "micron": 1e-6, "microns": 1e-6, "micrometre": 1e-6, "micrometer": 1e-6}
_LENGTHS |= {"in": 25.4e-3, "inch": 25.4e-3}
_STEPS = frozenset(
    [
        "count",
        "counts",
        "step",
        "steps",
        "microstep",
        "microsteps",
        "ustep",
        "usteps",
        "pulse",
        "pulses",
    ]
)
_SIGNAL_UNITS = frozenset(
    [
        "V",
        "mV",
        "uV",
        "µV",
        "A",
        "mA",
        "uA",
        "µA",
        "nA",
        "W",
        "mW",
        "uW",
        "µW",
        "nW",
        "counts",
        "count",
        "raw",
        "adu",
        "a.u.",
    ]
)
_OTHER_UNITS = frozenset(["s", "ms", "us", "min"])


@dataclass(frozen=True)
class ScanOptions:
    """What the caller says of a file; None leaves it to the file.

    ``position`` and ``signal`` name columns, or number them from 1. ``position_unit`` is what one
    unit of the position column is worth, a quantity of length; with ``is_opd`` it is worth that
    in OPD. ``opd_per_m`` is the bench's (its path factor times its air's index), used where no
    ``path_factor`` is given. ``range`` are the detector's limits in ``range_unit``.
    """

    position: str | None = None
    signal: str | None = None
    position_unit: str | None = None
    is_opd: bool = False
    path_factor: float | None = None
    opd_per_m: float | None = None
    material: str | None = None
    at: str | None = None
    at_wavelength_m: float | None = None
    band: tuple[float, float] | None = None
    dark: float | None = None
    range: tuple[float, float] | None = None
    signal_unit: str | None = None


@dataclass(frozen=True)
class ScanFile:
    """A file as it was understood.

    ``axis`` is ``position`` or ``opd``; ``scan.x`` is in metres where ``unit`` is ``um``, in counts
    where it is ``counts``. ``bad_rows`` are the numbers of the lines that were left out.
    """

    path: Path
    scan: Scan
    knowledge: Knowledge
    axis: str
    unit: str
    signal_unit: str
    bad_rows: tuple[int, ...]
    columns: tuple[str, ...]


@dataclass(frozen=True)
class _Column:
    index: int
    title: str
    name: str
    unit: str


def read_scan_file(path: Path | str, options: ScanOptions | None = None) -> ScanFile:
    """Read a recorded scan.

    CSV, TSV or semicolons with decimal commas; rows in any order. Rows without two finite numbers
    are counted and left out. Raises ScanFileError for a file that holds nothing usable, with the
    reason and what to do about it, and for options that do not fit it.
    """
    said = options if options is not None else ScanOptions()
    file = Path(path)
    where = str(file)
    lines = _text(file).splitlines()
    comments, start = _comments(lines)
    if start >= len(lines):
        raise ScanFileError(
            "the file holds no rows", where=where, why="only comments or blank lines", mend=_HOW
        )
    separator, decimal_comma = _separator(lines[start])
    columns = _columns(_split(lines[start], separator), decimal_comma)
    headed = bool(columns)
    if not headed:
        width = len(_split(lines[start], separator))
        columns = [_Column(i, str(i + 1), str(i + 1), "") for i in range(width)]
    place = _choose(columns, said.position, "position", where, headed=headed)
    light = _choose(columns, said.signal, "signal", where, headed=headed)
    body = start + 1 if headed else start
    values, bad = _rows(lines, body, separator, decimal_comma, (place.index, light.index))
    if values.shape[0] == 0:
        raise ScanFileError(
            "no row holds two finite numbers",
            where=where,
            why=f"{len(bad)} rows read, columns {place.title!r} and {light.title!r}; the first is "
            f"line {bad[0]}: {lines[bad[0] - 1][:60]!r}"
            if bad
            else "nothing follows the header",
            mend="check the columns (--position, --signal) and the decimal sign",
        )
    return _build(file, values, bad, columns, (place, light), comments, said)


_HOW = (
    "write a header such as 'position [um],signal [V]' and one row a reading, "
    "or name the columns with --position and --signal"
)


def _text(file: Path) -> str:
    where = str(file)
    try:
        if file.is_dir():
            raise ScanFileError(
                "this is a folder, not a scan file",
                where=where,
                mend="give the files in it by name",
            )
        size = file.stat().st_size
        if size > LARGEST_BYTES:
            raise ScanFileError(
                "the file is too large for one scan",
                where=where,
                why=f"{size / 2**20:.0f} MiB; at most {LARGEST_BYTES >> 20} MiB are read",
                mend="cut it to the stretch around the packet, or split it",
            )
        raw = file.read_bytes()
    except FileNotFoundError:
        raise ScanFileError(
            "there is no such file", where=where, mend="check the name and the folder"
        ) from None
    except (OSError, ValueError) as error:
        raise ScanFileError(
            "the file cannot be read",
            where=where,
            why=str(getattr(error, "strerror", None) or error),
            mend="check that it is a plain file and may be read",
        ) from None
    if not raw.strip():
        raise ScanFileError("the file is empty", where=where, why="no text in it", mend=_HOW)
    if raw[:2] in (b"\xff\xfe", b"\xfe\xff"):
        return raw.decode("utf-16", errors="replace")
    head = raw[:4096]
    odd = sum(byte < 9 or 13 < byte < 32 for byte in head)
    if b"\x00" in head or odd > len(head) // 50:
        raise ScanFileError(
            "the file is not text",
            where=where,
            why="its first bytes are binary",
            mend="export the scan as CSV and give that file",
        )
    try:
        return raw.decode("utf-8-sig")
    except UnicodeDecodeError:
        return raw.decode("latin-1")


def _comments(lines: list[str]) -> tuple[dict[str, str], int]:
    """Keys of the comment lines of the whole file, and the index of the first other line."""
    found: dict[str, str] = {}
    first = len(lines)
    for number, line in enumerate(lines):
        text = line.strip()
        if text.startswith("#"):
            match = _COMMENT.match(text)
            if match:
                found.setdefault(match[1].lower(), match[2])
        elif text:
            first = min(first, number)
    return found, first


def _separator(header: str) -> tuple[str, bool]:
    """The character between columns ('' for runs of blanks), and whether decimal commas may be."""
    if ";" in header:
        return ";", True
    if "\t" in header:
        return "\t", True
    return (",", False) if "," in header else ("", True)


def _split(line: str, separator: str) -> list[str]:
    cells = line.split(separator) if separator else re.split(r"\s+(?![\[(])", line.strip())
    return [cell.strip().strip('"').strip() for cell in cells]


def _number(text: str, *, decimal_comma: bool) -> float:
    """The number, NaN where the text is none."""
    if decimal_comma and text.count(",") == 1 and "." not in text:
        text = text.replace(",", ".")
    if not _NUMBER.match(text):
        return math.nan
    return float(text)


def _columns(cells: list[str], decimal_comma: bool) -> list[_Column]:
    """The header's columns; none where the line is already numbers."""
    if all(math.isfinite(_number(cell, decimal_comma=decimal_comma)) for cell in cells if cell):
        return []
    return [_column(index, cell) for index, cell in enumerate(cells)]


def _column(index: int, title: str) -> _Column:
    match = _BRACKETS.match(title)
    if match:
        name, unit = match[1], match[2]
    else:
        name, unit = title, ""
        parts = re.split(r"[\s_]+(?=[^\s_]+$)", title)
        if len(parts) == 2:
            known = set(_LENGTHS) | _STEPS | _SIGNAL_UNITS | _OTHER_UNITS
            if parts[1] in known or parts[1].lower() in known:
                name, unit = parts
    plain = re.sub(r"[^a-z0-9]+", "_", name.strip().lower()).strip("_")
    return _Column(index, title, plain, unit)


def _choose(
    columns: list[_Column], wanted: str | None, role: str, where: str, *, headed: bool
) -> _Column:
    there = ", ".join(repr(printable(column.title, 40)) for column in columns[:12])
    if wanted is not None:
        for column in columns:
            if wanted.strip() in (column.title, column.name, str(column.index + 1)):
                return column
        for column in columns:
            if wanted.strip().lower() in (column.title.lower(), column.name):
                return column
        raise ScanFileError(
            f"there is no column {wanted!r}",
            where=where,
            why=f"the columns are {there}",
            mend=f"give one of them, or its number from 1, with --{role}",
        )
    found = _known(columns, role)
    if found is not None and headed:
        return found
    raise ScanFileError(
        f"no column is recognised as the {role}",
        where=where,
        why=f"the columns are {there}"
        if headed
        else f"no header; there are {len(columns)} columns",
        mend=f"say which one it is: --position COLUMN --signal COLUMN{_numbered(headed)}",
    )


def _numbered(headed: bool) -> str:
    return "" if headed else " (numbers from 1), and --position-unit"


def _known(columns: list[_Column], role: str) -> _Column | None:
    if role == "position":
        for names in (_POSITIONS, _OPDS):
            for column in columns:
                if column.name in names:
                    return column
        return None
    for stem in _SIGNALS:
        for column in columns:
            if re.fullmatch(rf"{stem}(_?(1|a))?", column.name):
                return column
    return None


def _rows(
    lines: list[str], start: int, separator: str, decimal_comma: bool, wanted: tuple[int, int]
) -> tuple[np.ndarray[tuple[int, int], np.dtype[np.float64]], tuple[int, ...]]:
    """Values (rows, 2) of the two wanted columns, and the line numbers of the rows left out."""
    bad: list[int] = []

    def good() -> Iterator[tuple[float, float]]:
        most = max(wanted)
        for number in range(start, len(lines)):
            line = lines[number]
            if not line.strip() or line.lstrip().startswith("#"):
                continue
            cells = _split(line, separator)
            if len(cells) > most:
                x = _number(cells[wanted[0]], decimal_comma=decimal_comma)
                y = _number(cells[wanted[1]], decimal_comma=decimal_comma)
                if math.isfinite(x) and math.isfinite(y):
                    yield x, y
                    continue
            bad.append(number + 1)

    values = np.array(list(good()), dtype=np.float64).reshape(-1, 2)
    return values, tuple(bad)


def _build(
    file: Path,
    values: np.ndarray[tuple[int, int], np.dtype[np.float64]],
    bad: tuple[int, ...],
    columns: list[_Column],
    chosen: tuple[_Column, _Column],
    comments: Mapping[str, str],
    said: ScanOptions,
) -> ScanFile:
    where = str(file)
    place, light = chosen
    is_opd = said.is_opd or (place.name in _OPDS)
    worth, relative = _worth(place, said.position_unit, where)
    x = values[:, 0] * (worth if worth is not None else 1.0)
    opd_per_m = 1.0 if is_opd else _opd_per_m(comments, said, where)
    signal = values[:, 1]
    same_unit = said.signal_unit is None or said.signal_unit == light.unit
    dark = _dark(comments, light.unit, where)
    if dark is None and same_unit:
        dark = said.dark
    saturated = None
    if said.range is not None and same_unit:
        saturated = (signal <= said.range[0]) | (signal >= said.range[1])
    scan = Scan(
        x=x,
        signal=signal,
        opd_per_x=opd_per_m if worth is not None else None,
        opd_per_x_relative_uncertainty=relative,
        saturated=saturated,
        dark=dark,
    )
    at_wavelength_m = said.at_wavelength_m
    for text, key in ((comments.get("at_wavelength"), "at_wavelength"), (said.at, "--at")):
        if text is not None:
            at_wavelength_m = _wavelength(text, where, key)
    material = said.material or comments.get("material") or None
    if material is not None:
        material = _material(material, where)
    return ScanFile(
        path=file,
        scan=scan,
        knowledge=Knowledge(band=said.band, at_wavelength_m=at_wavelength_m, glass=material),
        axis="opd" if is_opd else "position",
        unit="um" if worth is not None else "counts",
        signal_unit=light.unit or ("counts" if light.name == "counts" else ""),
        bad_rows=bad,
        columns=tuple(column.title for column in columns),
    )


def _quantity(text: str, kind: str, where: str, key: str) -> tuple[float, float | None]:
    """Value in SI and its standard uncertainty; the file is named in the error."""
    from bench.quantities import parse

    try:
        quantity = parse(text, kind, where=f"{where}, {key}")
    except QuantityError as error:
        raise ScanFileError(
            error.what, where=f"{where}, {key}", why=error.why, mend=error.mend
        ) from None
    return quantity.si, quantity.si_uncertainty


def _worth(place: _Column, text: str | None, where: str) -> tuple[float | None, float]:
    """Metres for one unit of the position column with relative uncertainty; None where unknown."""
    if text is not None:
        written = text if re.match(r"\s*[+-]?[\d.,]", text) else f"1 {text}"
        value, uncertainty = _quantity(written, "length", where, "--position-unit")
        if value <= 0.0:
            raise ScanFileError(
                "what one unit of the position is worth must be more than zero",
                where=f"{where}, --position-unit",
                why=f"it says {text!r}",
                mend='give a length such as "18.55(74) pm"; a sign belongs to the path factor',
            )
        return value, (uncertainty or 0.0) / value
    unit = place.unit
    if unit in _LENGTHS or unit.lower() in _LENGTHS:
        return _LENGTHS.get(unit, _LENGTHS.get(unit.lower(), 1.0)), 0.0
    if unit == "" or unit.lower() in _STEPS:
        return None, 0.0
    value, uncertainty = _quantity(f"1 {unit}", "length", where, f"column {place.title}")
    return value, (uncertainty or 0.0) / value


def _opd_per_m(comments: Mapping[str, str], said: ScanOptions, where: str) -> float | None:
    factor, key = said.path_factor, "--path-factor"
    if factor is None and "path_factor" in comments:
        key = "path_factor"
        factor = _number(comments[key].replace("−", "-"), decimal_comma=True)
    if factor is None:
        return said.opd_per_m
    if not math.isfinite(factor) or factor == 0.0:
        raise ScanFileError(
            "the path factor must be a number other than zero",
            where=f"{where}, {key}",
            why=f"it says {comments.get('path_factor') if key == 'path_factor' else factor}",
            mend="2 or -2 for a folded arm moved along the beam, 4 or -4 for a double pass",
        )
    return AIR_INDEX * factor


def _wavelength(text: str, where: str, key: str) -> float:
    value, _ = _quantity(text, "length", where, key)
    if not 1e-8 < value < 1e-3:
        raise ScanFileError(
            "this cannot be the wavelength of the fringes",
            where=f"{where}, {key}",
            why=f"it says {text!r}",
            mend='write it like "600 nm"',
        )
    return value


def _material(text: str, where: str) -> str:
    from bench.optics import glass

    try:
        return glass.material(text).name
    except ValueError as error:
        raise ScanFileError(
            f"no formula is known for the material {text!r}",
            where=where,
            why=str(error),
            mend="one of " + ", ".join(glass.MATERIALS),
        ) from None


def _dark(comments: Mapping[str, str], unit: str, where: str) -> float | None:
    """The dark level of the comments, in the unit of the signal column."""
    text = comments.get("dark")
    if text is None:
        return None
    bare = _number(text, decimal_comma=True)
    if math.isfinite(bare):
        return bare
    scale, _ = _quantity(f"1 {unit}", "signal", where, "signal column") if unit else (1.0, None)
    value, _ = _quantity(text, "signal", where, "dark")
    return value / scale
