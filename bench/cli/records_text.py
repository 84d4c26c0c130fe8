"""Records as text for people: pure functions from records to lines of at most 80 columns."""

from __future__ import annotations

import math
import textwrap
import unicodedata
from collections.abc import Iterable, Mapping, Sequence
from typing import TYPE_CHECKING, Any, TypeGuard

from bench.errors import printable

if TYPE_CHECKING:
    from bench.journal import Entry, Head, MeasurementRecord, RunSummary, Verification

WIDTH = 80
_DEEPEST = 12
_TO_MM = {"nm": 1e-6, "um": 1e-3, "mm": 1.0, "m": 1e3}
_PLACES = ("zero", "stage_left_at")  # measured on the stage, so they are in mm
_MOST_PROBLEMS = 20


def run_list(runs: Sequence[RunSummary], limit: int, head: Head, path: str) -> list[str]:
    """Two lines a run, in the order given."""
    lines: list[str] = []
    for run in runs[:limit]:
        zero = f"zero {reading(run.zero)}" if run.zero else _clean(run.reason)
        lines.append(
            _cut(f"{_clean(run.run)}  {_moment(run.started_utc)}  {_clean(run.outcome)}  {zero}")
        )
        who = run.acknowledged_by or run.operator
        by = f", by {_clean(who)}" if who else ""
        simulated = " (simulated)" if run.simulated else ""
        on = f" on {_clean(run.bench_name)}" if run.bench_name else ""
        lines.append(_cut(f"    {_clean(run.procedure)}{on}{simulated}{by}"))
    if not runs:
        lines.append("No runs yet.")
    elif len(runs) > limit:
        lines.append(f"... and {len(runs) - limit} older; --limit shows more")
    return [*lines, "", *_fields([("journal", path), ("head", _head(head))])]


def one_run(
    run: RunSummary,
    measured: Sequence[MeasurementRecord],
    entries: Sequence[Entry],
    head: Head,
    width: int | None = WIDTH,
) -> list[str]:
    """A run: what came of it, what was measured, and its entries in one line each.

    The lines of entries are cut at ``width`` columns, or left whole where it is None.
    """
    rows = [
        ("run", run.run),
        ("procedure", run.procedure),
        ("bench", run.bench_name + (" (simulated)" if run.simulated else "")),
        ("operator", run.operator),
        ("acknowledged", run.acknowledged_by and f"by {run.acknowledged_by}"),
        ("started", f"{_moment(run.started_utc)} UTC"),
        ("ended", f"{_moment(run.ended_utc)} UTC" if run.ended_utc else "not in the journal"),
        ("outcome", run.outcome),
        ("reason", run.reason),
        ("zero", reading(run.zero) if run.zero else ""),
        ("residual OPD", quantity(run.residual_opd) if run.residual_opd else ""),
        ("entries", f"{run.entries}, from {run.first_seq}"),
        ("head", _head(head)),
    ]
    lines = _fields(rows)
    if measured:
        lines += ["", "Measurements"]
        lines += [
            _cut(f"  {_clean(item.id)}  {_clean(item.name)}  {_measured(item)}")
            for item in measured
        ]
    return [*lines, "", "Entries", *_entry_lines(entries, width)]


def one_measurement(item: MeasurementRecord, entries: Sequence[Entry], head: Head) -> list[str]:
    """A measurement with everything that traces it."""
    lines = _fields(
        [
            ("measurement", item.id),
            ("name", item.name),
            ("value", _measured(item)),
            ("run", item.run or ""),
            ("written", f"{_moment(item.time_utc)} UTC"),
            ("entry", str(item.seq)),
            ("sha256", entries[0].sha256 if entries else ""),
            ("head", _head(head)),
        ]
    )
    return [*lines, "", *_laid_out(item.body, 0)]


def one_entry(entry: Entry, columns: Mapping[str, Any], head: Head) -> list[str]:
    """An entry whole; ``columns`` are its readings, arrays of shape (n,), where it names some."""
    bench_s = entry.bench_time_s
    lines = _fields(
        [
            ("entry", str(entry.seq)),
            ("kind", entry.kind),
            ("run", entry.run or ""),
            ("written", entry.time_utc),
            ("bench time", f"{bench_s:.6f} s" if bench_s is not None else ""),
            ("sha256", entry.sha256),
            ("before it", entry.prev),
            ("head", _head(head)),
        ]
    )
    lines += ["", *_laid_out(entry.body, 0)]
    if columns:
        lines += ["", "Readings, the least and the greatest of each column"]
        for name, values in columns.items():
            kept = [value for value in values.tolist() if math.isfinite(value)]
            span = f"{min(kept):.9g} to {max(kept):.9g}" if kept else "no finite value"
            lines.append(_cut(f"  {_clean(name)}: {span}"))
    return lines


def verification(result: Verification, url: str) -> list[str]:
    """What a check of the chain found, worst news first."""
    lines = _fields(
        [
            ("journal", url),
            ("intact", "yes" if result.intact else "NO"),
            ("entries", str(result.entries)),
            ("head", result.head[:16]),
        ]
    )
    for problem in result.problems[:_MOST_PROBLEMS]:
        lines += _wrapped("  - ", _clean(problem))
    if len(result.problems) > _MOST_PROBLEMS:
        lines.append(f"  - and {len(result.problems) - _MOST_PROBLEMS} more; --json names them")
    if not result.intact:
        lines += _wrapped("", "Keep the file as it is and compare it with a copy.")
    return lines


def quantity(value: Mapping[str, Any]) -> str:
    """A quantity of the contract for people: ``13.218 401(12) mm``."""
    number, unit = value.get("value"), value.get("unit")
    u = value.get("standard_uncertainty")
    if not _is_number(number):
        return "not known"
    return _shown(number, u if _is_number(u) else None, unit if isinstance(unit, str) else "")


def reading(value: Mapping[str, Any]) -> str:
    """A place on the stage, in mm as the screens show it."""
    factor = _TO_MM.get(str(value.get("unit")))
    number, u = value.get("value"), value.get("standard_uncertainty")
    if factor is None or not _is_number(number):
        return quantity(value)
    in_mm: dict[str, Any] = {"value": number * factor, "unit": "mm"}
    return quantity(in_mm | ({"standard_uncertainty": u * factor} if _is_number(u) else {}))


# --- inside --------------------------------------------------------------------------------------


def _shown(value: Any, u: Any, unit: str) -> str:
    from bench.quantities import show

    try:
        bare = "" if unit == "1" else _clean(unit)
        return show(float(value), None if u is None else float(u), bare)
    except (ArithmeticError, ValueError):
        return f"{value} {_clean(unit)}".strip()


def _measured(item: MeasurementRecord) -> str:
    if item.value is None:
        return "no value"
    if item.name in _PLACES:
        u = item.standard_uncertainty
        text = reading({"value": item.value, "unit": item.unit, "standard_uncertainty": u})
    else:
        text = _shown(item.value, item.standard_uncertainty, item.unit)
    degrees = item.degrees_of_freedom
    return text if degrees is None else f"{text}, {degrees:.3g} degrees of freedom"


def _is_number(value: Any) -> TypeGuard[float]:
    return isinstance(value, int | float) and not isinstance(value, bool)


def _clean(text: object) -> str:
    return printable(text)


def _moment(time_utc: str) -> str:
    return _clean(time_utc[:19].replace("T", " "))


def _head(head: Head) -> str:
    return f"{head.sha256[:16]} after {head.entries} entries"


def _columns(text: str) -> int:
    return sum(
        0 if unicodedata.combining(ch) else 1 + (unicodedata.east_asian_width(ch) in "WF")
        for ch in text
    )


def _cut(line: str, width: int = WIDTH) -> str:
    line = line.rstrip()
    if _columns(line) <= width:
        return line
    while _columns(line) > width - 3:
        line = line[:-1]
    return line.rstrip() + "..."


def _wrapped(start: str, text: str) -> list[str]:
    # Wide characters take two columns each, so half the width holds any text.
    width = WIDTH if _columns(text) == len(text) else (WIDTH + len(start)) // 2
    return textwrap.wrap(text, width, initial_indent=start, subsequent_indent=" " * len(start)) or [
        start.rstrip()
    ]


def _fields(rows: Iterable[tuple[str, str]]) -> list[str]:
    lines: list[str] = []
    for label, text in rows:
        if text:
            lines += _wrapped(f"{label:<13}", _clean(text))
    return lines


def _laid_out(body: Mapping[str, Any], depth: int) -> list[str]:
    """A body as indented lines, keys in the order of the entry."""
    lines: list[str] = []
    for key, value in body.items():
        start = "  " * min(depth, _DEEPEST) + f"{printable(key, 30)}: "
        lines += _laid_out_value(start, value, depth)
    return lines


def _laid_out_value(start: str, value: Any, depth: int) -> list[str]:
    if isinstance(value, Mapping) and depth < _DEEPEST:
        if set(value) <= {"value", "unit", "standard_uncertainty"} and "value" in value:
            return _wrapped(start, quantity(value))
        return [start.rstrip(), *_laid_out(value, depth + 1)]
    if isinstance(value, list) and depth < _DEEPEST:
        if not any(isinstance(item, list | Mapping) for item in value):
            return _wrapped(start, ", ".join(_scalar(item) for item in value) or "none")
        lines = [start.rstrip()]
        for item in value:
            lines += _laid_out_value("  " * (depth + 1) + "- ", item, depth + 1)
        return lines
    return _wrapped(start, _scalar(value))


def _scalar(value: Any) -> str:
    if value is None:
        return "not known"
    if isinstance(value, bool):
        return "yes" if value else "no"
    return printable(value, 2000) if isinstance(value, str) else _clean(value)


def _entry_lines(entries: Sequence[Entry], width: int | None) -> list[str]:
    """A line an entry; readings of one scan that follow each other share one."""
    lines: list[str] = []
    index = 0
    while index < len(entries):
        entry = entries[index]
        last = index
        while entry.kind == "readings" and last + 1 < len(entries):
            following = entries[last + 1]
            if following.kind != "readings" or following.body.get("scan") != entry.body.get("scan"):
                break
            last += 1
        if entry.kind == "readings":
            kept = entries[index : last + 1]
            rows = sum(item.body["rows"] for item in kept if _is_number(item.body.get("rows")))
            said = f"scan {_clean(entry.body.get('scan'))}: {rows} rows in {len(kept)} block"
            said += "s" * (len(kept) != 1)
        else:
            said = _digest(entry.body, 60 if width is not None else 300)
        bench_s = "" if entry.bench_time_s is None else f"{entry.bench_time_s:.3f} s"
        moment = f"{entry.seq:>5} {_clean(entry.time_utc[11:19])} {bench_s:>10}"
        line = f"{moment} {_clean(entry.kind):<17} {said}".rstrip()
        lines.append(line if width is None else _cut(line, width))
        index = last + 1
    return lines


def _digest(body: Mapping[str, Any], longest: int) -> str:
    parts = []
    for key, value in body.items():
        if isinstance(value, Mapping):
            if "value" in value:
                said = reading(value) if key in _PLACES else quantity(value)
                parts.append(f"{_clean(key)} {said}")
        elif isinstance(value, float):
            parts.append(_number_with_unit(_clean(key), value))
        elif not isinstance(value, list) and value is not None:
            parts.append(f"{_clean(key)} {printable(_scalar(value), longest)}")
    return ", ".join(parts)


def _number_with_unit(key: str, value: float) -> str:
    """A bare number of the journal, whose key ends in its SI unit: ``position 7.291 620 mm``."""
    from bench.quantities import show_length

    if key.endswith("_m_s"):
        return f"{key.removesuffix('_m_s')} {_shown(value * 1e3, None, 'mm/s')}"
    if key.endswith("_m"):
        small = abs(value) < 1e-4 or not math.isfinite(value)
        said = show_length(value) if small else f"{value * 1e3:.6f} mm"
        return f"{key.removesuffix('_m')} {said}"
    if key.endswith("_s"):
        return f"{key.removesuffix('_s')} {_shown(value, None, 's')}"
    return f"{key} {value:.9g}"
