"""``evenarm records``: what the journal holds, and whether its chain holds."""

from __future__ import annotations

import dataclasses
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from bench.cli.output import EXIT_DONE, EXIT_NEGATIVE, emit_json, note, report_error
from bench.errors import EvenarmError

if TYPE_CHECKING:
    from bench.journal import Entry, MeasurementRecord, RunSummary

app = typer.Typer(no_args_is_help=True, rich_markup_mode=None)

_PROGRESS_FROM = 5000  # entries; below, a check is over before anybody reads a line

BenchOption = Annotated[
    Path | None, typer.Option("--bench", help="The bench description whose journal is meant.")
]
JournalOption = Annotated[
    str | None,
    typer.Option("--journal", help="A journal's file or URL, instead of the bench's own."),
]
JsonOption = Annotated[
    bool, typer.Option("--json", help="One JSON document on standard output, nothing else.")
]


def _url(bench: Path | None, journal: str | None) -> str:
    if journal is not None:
        return journal
    from bench.cli.benchfile import open_bench

    return open_bench(bench).records_url


@app.command("list", help="The runs in the journal, the newest first.")
def list_runs(
    limit: Annotated[int, typer.Option("--limit", "-n", min=1, help="At most so many runs.")] = 20,
    bench: BenchOption = None,
    journal: JournalOption = None,
    as_json: JsonOption = False,
) -> None:
    """The runs in the journal, the newest first."""
    try:
        from bench.journal import open_journal, runs

        with open_journal(_url(bench, journal), write=False) as book:
            found = list(reversed(runs(book)))
            head = book.head
            path = str(book.path)
    except EvenarmError as error:
        raise typer.Exit(report_error(error, as_json=as_json)) from error
    if as_json:
        emit_json(
            {
                "schema": "evenarm.records/1",
                "runs": [dataclasses.asdict(run) for run in found[:limit]],
                "count": len(found),
                "entries": head.entries,
                "head": head.sha256,
            }
        )
        return
    from bench.cli.records_text import run_list

    _say(run_list(found, limit, head, path))


@app.command("show", help="One run, measurement or entry.")
def show_record(
    wanted: Annotated[
        str,
        typer.Argument(
            metavar="ID", help="A run or how its name begins, a measurement, or an entry's number."
        ),
    ],
    bench: BenchOption = None,
    journal: JournalOption = None,
    as_json: JsonOption = False,
) -> None:
    """One run, measurement or entry, by its name or number."""
    try:
        from bench.journal import Entry, MeasurementRecord, measurements, open_journal
        from bench.journal.find import find_record

        with open_journal(_url(bench, journal), write=False) as book:
            record = find_record(book, wanted)
            head = book.head
            entries: list[Entry] = []
            measured: list[MeasurementRecord] = []
            columns: dict[str, Any] = {}
            if isinstance(record, Entry):
                if record.kind == "readings":
                    columns = book.block(record)
            elif isinstance(record, MeasurementRecord):
                entries = [entry for entry in (book.entry(record.seq),) if entry is not None]
            else:
                entries = list(book.entries(run=record.run))
                measured = measurements(book, record.run)
    except EvenarmError as error:
        raise typer.Exit(report_error(error, as_json=as_json)) from error
    if as_json:
        emit_json(_record_json(record, entries, measured) | {"head": head.sha256})
        return
    from bench.cli import records_text

    if isinstance(record, Entry):
        _say(records_text.one_entry(record, columns, head))
    elif isinstance(record, MeasurementRecord):
        _say(records_text.one_measurement(record, entries, head))
    else:
        _say(records_text.one_run(record, measured, entries, head, _width()))


@app.command("verify", help="Check the whole chain: every entry, every reading.")
def verify_chain(
    noted: Annotated[
        list[str] | None,
        typer.Option(
            "--head", help="A head noted earlier, 16 digits or more; it must be in the chain."
        ),
    ] = None,
    bench: BenchOption = None,
    journal: JournalOption = None,
    as_json: JsonOption = False,
) -> None:
    """Check the whole chain; exit status 1 where it does not hold."""
    try:
        from bench.journal import verify

        url = _url(bench, journal)
        result = verify(url, _Progress(), noted_heads=tuple(noted or ()))
    except EvenarmError as error:
        raise typer.Exit(report_error(error, as_json=as_json)) from error
    if as_json:
        emit_json(
            {
                "schema": "evenarm.verify/1",
                "entries": result.entries,
                "intact": result.intact,
                "head": result.head,
                "problems": list(result.problems),
            }
        )
    else:
        from bench.cli.records_text import verification

        _say(verification(result, url))
    raise typer.Exit(EXIT_DONE if result.intact else EXIT_NEGATIVE)


class _Progress:
    """A line on standard error for each tenth of a long journal."""

    def __init__(self) -> None:
        self._said = 0

    def __call__(self, done: int, total: int) -> None:
        tenth = 10 * done // total
        if total >= _PROGRESS_FROM and tenth > self._said:
            self._said = tenth
            note(f"checked {done} of {total} entries")


def _record_json(
    record: RunSummary | MeasurementRecord | Entry,
    entries: list[Entry],
    measured: list[MeasurementRecord],
) -> dict[str, Any]:
    from bench.journal import Entry, MeasurementRecord

    document: dict[str, Any] = {"schema": "evenarm.record/1"}
    if isinstance(record, Entry):
        return document | {"record": "entry", "entry": dataclasses.asdict(record)}
    if isinstance(record, MeasurementRecord):
        return document | {"record": "measurement", "measurement": dataclasses.asdict(record)}
    return document | {
        "record": "run",
        "run": dataclasses.asdict(record),
        "measurements": [dataclasses.asdict(item) for item in measured],
        "entries": [dataclasses.asdict(entry) for entry in entries],
    }


def _width() -> int | None:
    """Columns that a line may take; None where no terminal cuts it."""
    import sys

    from bench.cli.records_text import WIDTH

    return WIDTH if sys.stdout.isatty() else None


def _say(lines: list[str]) -> None:
    typer.echo("\n".join(lines))
