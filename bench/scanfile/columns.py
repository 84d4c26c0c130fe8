"""Headers of scan files: which column is the position, which the signal, and their units."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass

from bench.errors import ScanFileError, printable
from bench.scanfile.text import number

_BRACKETS = re.compile(r"^(.*?)[\s_]*[\[(]\s*([^\])]*?)\s*[\])]\s*$")
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
OPDS = frozenset(["opd", "path_difference", "optical_path_difference", "delay_length"])
_SIGNALS = ("signal", "photodiode", "detector", "intensity", "voltage", "power", "counts")
LENGTHS = {"m": 1.0, "mm": 1e-3, "um": 1e-6, "µm": 1e-6, "μm": 1e-6, "nm": 1e-9, "pm": 1e-12}
LENGTHS |= {"cm": 1e-2, "micron": 1e-6, "microns": 1e-6, "micrometre": 1e-6, "micrometer": 1e-6}
LENGTHS |= {"in": 25.4e-3, "inch": 25.4e-3}
STEPS = frozenset(
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
class Column:
    index: int
    title: str
    name: str
    unit: str


def header(cells: list[str], decimal_comma: bool) -> list[Column]:
    """The header's columns; none where the line is already numbers."""
    if all(math.isfinite(number(cell, decimal_comma=decimal_comma)) for cell in cells if cell):
        return []
    return [_column(index, cell) for index, cell in enumerate(cells)]


def _column(index: int, title: str) -> Column:
    match = _BRACKETS.match(title)
    if match:
        name, unit = match[1], match[2]
    else:
        name, unit = title, ""
        parts = re.split(r"[\s_]+(?=[^\s_]+$)", title)
        if len(parts) == 2:
            known = set(LENGTHS) | STEPS | _SIGNAL_UNITS | _OTHER_UNITS
            if parts[1] in known or parts[1].lower() in known:
                name, unit = parts
    plain = re.sub(r"[^a-z0-9]+", "_", name.strip().lower()).strip("_")
    return Column(index, title, plain, unit)


def choose(
    columns: list[Column], wanted: str | None, role: str, where: str, *, headed: bool
) -> Column:
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


def _known(columns: list[Column], role: str) -> Column | None:
    if role == "position":
        for names in (_POSITIONS, OPDS):
            for column in columns:
                if column.name in names:
                    return column
        return None
    for stem in _SIGNALS:
        for column in columns:
            if re.fullmatch(rf"{stem}(_?(1|a))?", column.name):
                return column
    return None
