"""``evenarm run``: perform a procedure here in the terminal, with or without a person."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from bench.cli.options import BenchFile, Seed
from bench.cli.output import (
    EXIT_DEVICE,
    EXIT_DONE,
    EXIT_NEGATIVE,
    EXIT_STOPPED,
    emit_json,
    quantity,
    report_error,
)
from bench.errors import EvenarmError, UsageError, printable

if TYPE_CHECKING:
    from bench.procedure.session import RunSession
    from bench.procedure.state import RunState

EXIT_BY_OUTCOME = {
    "accepted": EXIT_DONE,
    "rejected": EXIT_NEGATIVE,
    "not found": EXIT_NEGATIVE,
    "stopped": EXIT_STOPPED,
    "fault": EXIT_DEVICE,
}


def command(
    procedure: Annotated[str, typer.Argument(help="Name of a procedure, or a file.")],
    bench: BenchFile = None,
    unattended: Annotated[
        bool, typer.Option("--unattended", help="Ask nothing (simulated benches, or allowed ones).")
    ] = False,
    acknowledge: Annotated[
        str | None,
        typer.Option("--acknowledge", help="Who answers for an unattended run; recorded."),
    ] = None,
    operator: Annotated[
        str | None, typer.Option("--operator", help="Your name for the record.")
    ] = None,
    seed: Seed = None,
    pace: Annotated[
        str | None,
        typer.Option(
            "--pace",
            help="Simulated bench time: real, fast, or how many times faster than real; "
            "10 with somebody there, fast without.",
        ),
    ] = None,
    reveal: Annotated[
        bool, typer.Option("--reveal", help="Tell a simulated bench's truth after the run.")
    ] = False,
    as_json: Annotated[bool, typer.Option("--json", help="One JSON document on output.")] = False,
) -> None:
    asked = Asked(
        procedure,
        bench=bench,
        unattended=unattended,
        acknowledge=acknowledge,
        operator=operator,
        seed=seed,
        pace=pace if pace is not None else ("fast" if unattended else "10"),
    )
    try:
        status = perform(asked, reveal=reveal, as_json=as_json)
    except EvenarmError as error:
        raise typer.Exit(report_error(error, as_json=as_json)) from None
    raise typer.Exit(status)


@dataclass(frozen=True)
class Asked:
    """What a command line asks of a run."""

    procedure: str
    bench: Path | None
    seed: int | None
    pace: str
    unattended: bool = False
    acknowledge: str | None = None
    operator: str | None = None


def perform(asked: Asked, *, reveal: bool, as_json: bool) -> int:
    """Run and report. Raises EvenarmError; returns the exit status."""
    import sys

    from bench.cli.watch import Watcher, signals_stop

    session = new_session(asked)
    if not asked.unattended and not sys.stdin.isatty():
        raise UsageError(
            "nobody is there to answer",
            where="standard input",
            why="it is not a terminal, and this run asks questions",
            mend="run it in a terminal, or with --unattended on a simulated bench",
        )
    watcher = Watcher(session, ask=not asked.unattended)
    with signals_stop(session):
        try:
            watcher.follow()
        finally:
            watcher.end()
    if session.error is not None:
        raise session.error
    state = watcher.state()
    _report(session, state, as_json=as_json, reveal=reveal)
    return EXIT_BY_OUTCOME.get(state.outcome or "fault", EXIT_DEVICE)


def new_session(asked: Asked) -> RunSession:
    """A run that is ready to begin. Raises EvenarmError."""
    import getpass
    import secrets
    from datetime import UTC, datetime

    from bench.cli.benchfile import open_bench
    from bench.procedure.devices import parse_pace
    from bench.procedure.session import RunOptions, RunSession
    from bench.procedure.text import find_procedure

    paced = parse_pace(asked.pace)
    acknowledged_by = _name("--acknowledge", asked.acknowledge)
    operator = _name("--operator", asked.operator)
    spec = open_bench(asked.bench, seed=asked.seed)
    found = find_procedure(asked.procedure, spec.folder)
    if operator is None:
        try:
            operator = getpass.getuser()
        except (KeyError, OSError):
            operator = "unknown"
    options = RunOptions(
        operator=printable(operator, 80),
        unattended=asked.unattended,
        acknowledged_by=acknowledged_by,
        pace=paced,
    )
    started = datetime.now(UTC)
    return RunSession(
        spec,
        found,
        options,
        now=lambda: datetime.now(UTC),
        run_id=f"{started:%Y%m%d-%H%M%S}-{secrets.token_hex(2)}",
    )


def _name(option: str, text: str | None) -> str | None:
    """A person's name, without control characters. Raises UsageError for a blank one."""
    if text is None:
        return None
    name = printable(text, 80).strip()
    if not name:
        raise UsageError("a name is needed", where=option, mend="give the name of a person")
    return name


def result_document(session: RunSession, state: RunState) -> dict[str, Any]:
    """The contract's document of a run that has ended."""
    from bench.procedure.results import result_quantities

    return {
        "schema": "evenarm.run/1",
        "run": session.run_id,
        "outcome": state.outcome,
        **result_quantities(session.setup, state),
        "measurements": list(state.measurements),
        "head": session.view().head,
        "reason": state.reason,
        "next": session.view().next_action,
    }


def _report(session: RunSession, state: RunState, *, as_json: bool, reveal: bool) -> None:
    document = result_document(session, state)
    if reveal:
        truth = session.truth
        document["truth"] = truth and {
            "zero": quantity(truth.zero_m * 1e6, "um"),
            "residual_opd": quantity(truth.residual_opd_m * 1e9, "nm"),
        }
    if as_json:
        emit_json(document)
        return
    typer.echo("\n".join(result_lines(document)))


def result_lines(document: Mapping[str, Any]) -> list[str]:
    """The result of a run for people, as it stands after the run in a plain terminal."""
    from bench.quantities import Quantity, show

    def row(label: str, key: str, unit: str) -> list[str]:
        said = document.get(key)
        if said is None:
            return []
        q = Quantity(said["value"], said["unit"], said.get("standard_uncertainty")).to(unit)
        return [f"  {label:<22}{show(q.value, q.standard_uncertainty, unit)}"]

    lines = [f"{str(document['outcome']).upper()}: {document['reason']}"]
    lines += row("zero (stage reading)", "zero", "mm")
    lines += row("at wavelength", "at_wavelength", "nm")
    lines += row("stage left at", "stage_left_at", "mm")
    lines += row("residual OPD", "residual_opd", "nm")
    lines.append(f"  {'bench time':<22}{document['bench_time']['value']:.1f} s")
    truth = document.get("truth")
    if truth:
        lines.append(f"  {'true zero':<22}{truth['zero']['value'] / 1e3:.7f} mm")
        lines.append(f"  {'true residual OPD':<22}{truth['residual_opd']['value']:.1f} nm")
    lines.append(f"  {'run':<22}{document['run']}")
    lines.append(f"  {'journal head':<22}{str(document['head'])[:16]}")
    lines.append(f"  {'next':<22}{document['next']}")
    return lines
