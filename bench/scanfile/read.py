"""From the columns of a scan file to a scan and what is known of it."""

from __future__ import annotations

import math
import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from bench.errors import QuantityError, ScanFileError
from bench.fringes.model import Knowledge, Scan
from bench.scanfile.columns import LENGTHS, OPDS, STEPS, Column, choose, header
from bench.scanfile.text import HOW, comments_of, number, read_text, separator_of, split

if TYPE_CHECKING:
    from bench.quantities import Quantity

AIR_INDEX = 1.00027  # where no climate is known
SMALLEST_COUNT_M = 1e-15  # finer than any encoder divides
LARGEST_COUNT_M = 1.0


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

    ``position_unit`` carries an uncertainty that moves all positions alike, so it is not in that of
    the zero. ``axis`` is ``position`` or ``opd``; ``scan.x`` is in metres where ``unit`` is ``um``,
    in counts where it is ``counts``. ``bad_rows`` are the numbers of the lines that were left out.
    """

    path: Path
    scan: Scan
    knowledge: Knowledge
    axis: str
    unit: str
    signal_unit: str
    bad_rows: tuple[int, ...]
    columns: tuple[str, ...]
    position_unit: Quantity | None = None  # what a count is worth, where the caller said so
    ignored_unit: str = ""  # the file's own unit, where it stands against the caller's


def read_scan_file(path: Path | str, options: ScanOptions | None = None) -> ScanFile:
    """Read a recorded scan.

    CSV, TSV or semicolons with decimal commas; rows in any order. Rows without two finite numbers
    are counted and left out. Raises ScanFileError for a file that holds nothing usable, with the
    reason and what to do about it, and for options that do not fit it.
    """
    said = options if options is not None else ScanOptions()
    file = Path(path)
    where = str(file)
    lines = read_text(file).splitlines()
    comments, start = comments_of(lines)
    if start >= len(lines):
        raise ScanFileError(
            "the file holds no rows", where=where, why="only comments or blank lines", mend=HOW
        )
    separator, decimal_comma = separator_of(lines[start])
    columns = header(split(lines[start], separator), decimal_comma)
    headed = bool(columns)
    if not headed:
        width = len(split(lines[start], separator))
        columns = [Column(i, str(i + 1), str(i + 1), "") for i in range(width)]
    place = choose(columns, said.position, "position", where, headed=headed)
    light = choose(columns, said.signal, "signal", where, headed=headed)
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


def _rows(
    lines: list[str], start: int, separator: str, decimal_comma: bool, wanted: tuple[int, int]
) -> tuple[np.ndarray[tuple[int, int], np.dtype[np.float64]], tuple[int, ...]]:
    """Values (rows, 2) of the two wanted columns, and the line numbers of the rows left out."""
    bad: list[int] = []

    def good() -> Iterator[tuple[float, float]]:
        most = max(wanted)
        for at in range(start, len(lines)):
            line = lines[at]
            if not line.strip() or line.lstrip().startswith("#"):
                continue
            cells = split(line, separator)
            if len(cells) > most:
                x = number(cells[wanted[0]], decimal_comma=decimal_comma)
                y = number(cells[wanted[1]], decimal_comma=decimal_comma)
                if math.isfinite(x) and math.isfinite(y):
                    yield x, y
                    continue
            bad.append(at + 1)

    values = np.array(list(good()), dtype=np.float64).reshape(-1, 2)
    return values, tuple(bad)


def _build(
    file: Path,
    values: np.ndarray[tuple[int, int], np.dtype[np.float64]],
    bad: tuple[int, ...],
    columns: list[Column],
    chosen: tuple[Column, Column],
    comments: Mapping[str, str],
    said: ScanOptions,
) -> ScanFile:
    where = str(file)
    place, light = chosen
    is_opd = said.is_opd or (place.name in OPDS)
    own_unit = _length_unit(place.unit) is not None
    count = _count(said.position_unit, where)
    if own_unit:
        count = None
    worth, relative = _worth(place, count, where)
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
        position_unit=count,
        ignored_unit=place.unit if own_unit and said.position_unit is not None else "",
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


def _length_unit(unit: str) -> float | None:
    """Metres for one of a unit of length in a header; None where it is none of those."""
    return LENGTHS.get(unit, LENGTHS.get(unit.lower()))


def _count(text: str | None, where: str) -> Quantity | None:
    """What ``--position-unit`` says that one count is worth; None where it says nothing."""
    if text is None:
        return None
    from bench.quantities import parse

    written = text if re.match(r"\s*[+-]?[\d.,(]", text) else f"1 {text}"
    key = f"{where}, --position-unit"
    try:
        count = parse(written, "length", where=key)
    except QuantityError as error:
        raise ScanFileError(error.what, where=key, why=error.why, mend=error.mend) from None
    if not SMALLEST_COUNT_M <= count.si <= LARGEST_COUNT_M:
        raise ScanFileError(
            "what one unit of the position is worth must be more than zero"
            if count.si <= 0.0
            else "this cannot be what one unit of the position is worth",
            where=key,
            why=f"it says {text!r}; possible is {SMALLEST_COUNT_M:g} m to {LARGEST_COUNT_M:g} m",
            mend='give a length such as "18.55(74) pm"; a sign belongs to the path factor',
        )
    return count


def _worth(place: Column, count: Quantity | None, where: str) -> tuple[float | None, float]:
    """Metres for one unit of the position column with relative uncertainty; None where unknown."""
    if count is not None:
        return count.si, (count.si_uncertainty or 0.0) / count.si
    unit = place.unit
    length_m = _length_unit(unit)
    if length_m is not None:
        return length_m, 0.0
    if unit == "" or unit.lower() in STEPS:
        return None, 0.0
    value, uncertainty = _quantity(f"1 {unit}", "length", where, f"column {place.title}")
    return value, (uncertainty or 0.0) / value


def _opd_per_m(comments: Mapping[str, str], said: ScanOptions, where: str) -> float | None:
    factor, key = said.path_factor, "--path-factor"
    if factor is None and "path_factor" in comments:
        key = "path_factor"
        factor = number(comments[key].replace("−", "-"), decimal_comma=True)
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
    bare = number(text, decimal_comma=True)
    if math.isfinite(bare):
        return bare
    scale, _ = _quantity(f"1 {unit}", "signal", where, "signal column") if unit else (1.0, None)
    value, _ = _quantity(text, "signal", where, "dark")
    return value / scale
