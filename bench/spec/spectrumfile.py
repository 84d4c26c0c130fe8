"""Spectra of lamps as files: CSV of wavelength and relative power, or JCAMP-DX in plain numbers.

CSV: one header line that states the unit of the first column (``wavelength [nm],power``), then
rows; lines that begin with ``#`` are comments; semicolons with decimal commas are understood.
Wavelengths are taken as vacuum wavelengths and the power as per unit of the first column.

JCAMP-DX 4.24 (McDonald and Wilks 1988, Appl. Spectrosc. 42, 151): ``XYDATA=(X++(Y..Y))`` and
``XYPOINTS=(XY..XY)`` in AFFN, the form with plain numbers. The compressed forms are refused.
"""

from __future__ import annotations

import math
import re
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from bench.errors import InputError, QuantityError
from bench.quantities import dimension_of, parse_in
from bench.spec.reading import read_text

FloatArray = NDArray[np.float64]
LARGEST_BYTES = 5_000_000
_MEND = 'begin with a line such as "wavelength [nm],power", then one row for each wavelength'
_NUMBER = re.compile(r"[+-]?(?:[0-9]+(?:\.[0-9]*)?|\.[0-9]+)(?:[eE][+-]?[0-9]{1,3})?")
_JCAMP_UNITS = {"NANOMETERS": "nm", "MICROMETERS": "um", "1/CM": "1/cm"}

__all__ = ["read_spectrum"]


def read_spectrum(path: Path) -> tuple[FloatArray, FloatArray]:
    """Vacuum wavelengths in metres, rising, and power per wavelength, both of shape (n,), n >= 2.

    Negative readings (noise about zero) become zero. Raises InputError.
    """
    text, _ = read_text(path, "the spectrum's file", _MEND, LARGEST_BYTES)
    where = str(path)
    jcamp = text.lstrip().startswith("##")
    x, power, unit = _jcamp(text, where) if jcamp else _csv(text, where)
    scale = parse_in(f"1 {unit}", "1/m" if dimension_of(unit) == "wavenumber" else "m").value
    axis, density = np.asarray(x) * scale, np.asarray(power)
    if axis.size < 2:
        raise InputError("the spectrum's file has fewer than two rows", where=where, mend=_MEND)
    if not (np.all(np.isfinite(axis)) and np.all(np.isfinite(density)) and np.all(axis > 0)):
        raise InputError(
            "the spectrum's file holds a number that cannot be",
            where=where,
            why="wavelengths must be positive and every number finite",
        )
    if dimension_of(unit) == "wavenumber":
        axis = 1.0 / axis
        density = density / axis**2  # from per wavenumber to per wavelength
    order = np.argsort(axis)
    wavelength_m, density = axis[order], np.clip(density[order], 0.0, None)
    if np.any(np.diff(wavelength_m) <= 0):
        raise InputError("a wavelength stands twice in the spectrum's file", where=where)
    if not 0.1e-6 <= wavelength_m[0] <= wavelength_m[-1] <= 30e-6:
        raise InputError(
            "the wavelengths of the spectrum's file cannot be right",
            where=where,
            why=f"{wavelength_m[0] * 1e9:g} nm to {wavelength_m[-1] * 1e9:g} nm",
            mend="look at the unit in the first line",
        )
    if not np.any(density > 0):
        raise InputError("the spectrum's file holds no light", where=where)
    return wavelength_m, density / np.max(density)


def _csv(text: str, where: str) -> tuple[list[float], list[float], str]:
    rows = [
        (number, line.strip())
        for number, line in enumerate(text.splitlines(), 1)
        if line.strip() and not line.lstrip().startswith("#")
    ]
    if not rows:
        raise InputError("the spectrum's file has no rows", where=where, mend=_MEND)
    header = rows[0][1]
    separator = next((mark for mark in (";", "\t", ",") if mark in header), ",")
    first = header.split(separator)[0].strip().strip('"')
    match = re.fullmatch(r".*?(?:\[\s*(.+?)\s*\]|\(\s*(.+?)\s*\)|[_ ]([A-Za-zµμ/1]+))", first)
    unit = next((group for group in match.groups() if group), "") if match else ""
    try:
        known = dimension_of(unit) in {"length", "wavenumber"}
    except QuantityError:
        known = False
    if not known:
        raise InputError(
            "the spectrum's file does not say in what unit its wavelengths are",
            where=f"{where}, line {rows[0][0]}",
            why=f"the first column is called {first!r}",
            mend=_MEND,
        )
    x: list[float] = []
    power: list[float] = []
    for number, line in rows[1:]:
        cells = [cell.strip().strip('"') for cell in line.split(separator)]
        if separator != ",":
            cells = [cell.replace(",", ".") for cell in cells]
        if len(cells) < 2 or not all(_NUMBER.fullmatch(cell) for cell in cells[:2]):
            raise InputError(
                "a row of the spectrum's file is not two numbers",
                where=f"{where}, line {number}",
                why=repr(line[:60]),
                mend=_MEND,
            )
        x.append(float(cells[0]))
        power.append(float(cells[1]))
    return x, power, unit


def _jcamp(text: str, where: str) -> tuple[list[float], list[float], str]:
    labels: dict[str, str] = {}
    data: list[tuple[int, str]] = []
    label = ""
    for number, whole in enumerate(text.splitlines(), 1):
        line = whole.split("$$")[0].strip()
        if line.startswith("##"):
            name, _, value = line[2:].partition("=")
            label = re.sub(r"[\s/_-]", "", name).upper()
            labels.setdefault(label, value.strip().upper())
            if label == "END":
                break
        elif label in {"XYDATA", "XYPOINTS", "PEAKTABLE"} and line:
            data.append((number, line))
    unit = _JCAMP_UNITS.get(labels.get("XUNITS", ""))
    form = next((name for name in ("XYDATA", "XYPOINTS") if name in labels), "")
    if unit is None or not form:
        raise InputError(
            "the JCAMP-DX file cannot be used",
            where=where,
            why=f"XUNITS={labels.get('XUNITS', '(missing)')}, data as {form or 'neither form'}",
            mend=f"XUNITS is one of {', '.join(_JCAMP_UNITS)}; data as XYDATA or XYPOINTS",
        )
    if "ABSORB" in labels.get("YUNITS", "") or "TRANSM" in labels.get("YUNITS", ""):
        raise InputError(
            "the JCAMP-DX file is not the spectrum of a source",
            where=where,
            why=f"YUNITS={labels['YUNITS']}",
        )
    factors = [_label_number(labels, name, 1.0, where) for name in ("XFACTOR", "YFACTOR")]
    x: list[float] = []
    y: list[float] = []
    for number, line in data:
        tokens = _affn(line, f"{where}, line {number}", signs=form == "XYDATA")
        if form == "XYPOINTS":
            x += tokens[0::2]
            y += tokens[1::2]
        else:
            y += tokens[1:]
    if form == "XYDATA":
        ends = [_label_number(labels, name, math.nan, where) for name in ("FIRSTX", "LASTX")]
        if not all(map(math.isfinite, ends)):
            raise InputError("the JCAMP-DX file lacks FIRSTX or LASTX", where=where)
        points = _label_number(labels, "NPOINTS", len(y), where)
        if points != len(y):
            raise InputError(
                "the JCAMP-DX file is cut short",
                where=where,
                why=f"NPOINTS={points:g}, but {len(y)} values are there",
            )
        x = [float(value) for value in np.linspace(ends[0], ends[1], len(y))]
        factors[0] = 1.0  # FIRSTX and LASTX are in the unit itself
    if len(x) != len(y):
        raise InputError("a point of the JCAMP-DX file lacks its second number", where=where)
    return [v * factors[0] for v in x], [v * factors[1] for v in y], unit


def _affn(line: str, where: str, *, signs: bool) -> list[float]:
    """Numbers of one line; in XYDATA a sign may stand between two numbers without a space."""
    spread = re.sub(r"(?<=[0-9.])(?=[+-])", " ", line) if signs else line
    tokens = [token for token in re.split(r"[\s,;]+", spread) if token]
    if not all(_NUMBER.fullmatch(token) for token in tokens):
        raise InputError(
            "the JCAMP-DX file is not in plain numbers",
            where=where,
            why=repr(line[:60]),
            mend="export it again without compression (AFFN)",
        )
    return [float(token) for token in tokens]


def _label_number(labels: dict[str, str], name: str, default: float, where: str) -> float:
    text = labels.get(name)
    if text is None:
        return default
    if not _NUMBER.fullmatch(text):
        raise InputError(f"##{name}= is not a number", where=where, why=repr(text[:60]))
    return float(text)
