"""Questions that commands and screens ask of a journal: its runs, its measurements, one record."""

from __future__ import annotations

import os
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from typing import Any

from bench.errors import UsageError
from bench.journal import open_journal
from bench.journal.book import Journal
from bench.journal.model import Entry, MeasurementRecord, RunSummary

_SHORTEST_PREFIX = 4


@contextmanager
def opened(source: Journal | str | os.PathLike[str]) -> Iterator[Journal]:
    """``source`` itself where it is open already, else opened for reading for the time being."""
    if isinstance(source, Journal):
        yield source
    else:
        with open_journal(source, write=False) as journal:
            yield journal


def all_runs(journal: Journal) -> list[RunSummary]:
    """All runs, oldest first; an entry of a run that never started is not a run."""
    started = {entry.run: entry for entry in journal.entries(kinds=("run-started",)) if entry.run}
    ended = {entry.run: entry for entry in journal.entries(kinds=("run-ended",)) if entry.run}
    counts = journal.entries_by_run()
    answered: dict[str, str] = {}
    for entry in journal.entries(kinds=("question-answered",)):
        by = _text(entry.body, "by")
        if entry.run and by and entry.body.get("accepted") is True and not by.startswith("nobody"):
            answered.setdefault(entry.run, by)
    return [
        _summary(run, entry, ended.get(run), counts.get(run, 0), answered.get(run, ""))
        for run, entry in started.items()
    ]


def all_measurements(journal: Journal, run: str | None = None) -> list[MeasurementRecord]:
    """All measurements, or those of one run, oldest first."""
    return [_measurement(entry) for entry in journal.entries(run, ("measurement",))]


def find_record(journal: Journal, wanted: str) -> RunSummary | MeasurementRecord | Entry:
    """What ``wanted`` names: a run, a measurement, ``12`` or ``#12`` an entry, or the beginning
    of a run's name, at least four characters that no other run begins with. Raises UsageError.
    """
    runs = all_runs(journal)
    for run in runs:
        if run.run == wanted:
            return run
    for measurement in all_measurements(journal):
        if measurement.id == wanted:
            return measurement
    number = wanted.removeprefix("#")
    if number.isascii() and number.isdigit() and len(number) < 19:
        entry = journal.entry(int(number))
        if entry is not None:
            return entry
    begun = [run for run in runs if run.run.startswith(wanted)]
    if len(wanted) >= _SHORTEST_PREFIX and len(begun) == 1:
        return begun[0]
    if len(wanted) >= _SHORTEST_PREFIX and begun:
        newest = ", ".join(run.run for run in begun[-3:])
        raise UsageError(
            f"{len(begun)} runs begin with {wanted}",
            where=str(journal.path),
            why=f"the newest are {newest}",
            mend="write more of the run's name",
        )
    raise UsageError(
        f"There is no record {wanted}",
        where=str(journal.path),
        why=f"it holds {len(runs)} runs and {journal.head.entries} entries",
        mend="evenarm records list names the runs; an entry is a number, such as 12",
    )


def _text(body: Mapping[str, Any], key: str) -> str:
    value = body.get(key)
    return value if isinstance(value, str) else ""


def _number(value: Any) -> float | None:
    return float(value) if isinstance(value, int | float) and not isinstance(value, bool) else None


def _quantity(body: Mapping[str, Any], key: str) -> Mapping[str, Any] | None:
    value = body.get(key)
    if isinstance(value, dict) and _number(value.get("value")) is not None:
        return value
    return None


def _summary(
    run: str, start: Entry, end: Entry | None, entries: int, answered_by: str
) -> RunSummary:
    result: Mapping[str, Any] = {} if end is None else end.body
    return RunSummary(
        run=run,
        started_utc=start.time_utc,
        procedure=_text(start.body, "procedure"),
        bench_name=_text(start.body, "bench_name"),
        operator=_text(start.body, "operator"),
        outcome="open" if end is None else _text(result, "outcome") or "ended",
        entries=entries,
        first_seq=start.seq,
        simulated=start.body.get("simulated") is True,
        reason=_text(result, "reason"),
        ended_utc=None if end is None else end.time_utc,
        zero=_quantity(result, "zero"),
        residual_opd=_quantity(result, "residual_opd"),
        acknowledged_by=answered_by or _text(start.body, "acknowledged_by"),
    )


def _measurement(entry: Entry) -> MeasurementRecord:
    body = entry.body
    return MeasurementRecord(
        id=_text(body, "id"),
        name=_text(body, "name"),
        run=entry.run,
        seq=entry.seq,
        time_utc=entry.time_utc,
        value=_number(body.get("value")),
        unit=_text(body, "unit"),
        standard_uncertainty=_number(body.get("standard_uncertainty")),
        degrees_of_freedom=_number(body.get("degrees_of_freedom")),
        body=body,
    )
