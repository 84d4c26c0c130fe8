"""The command line: thin, and quick to start. Each command lives in a module of its own."""

from __future__ import annotations

import os
import sys
from typing import Annotated

import typer

from bench import __version__
from bench.cli import check, drivers, fit, new, plan, records, run
from bench.cli.options import BenchFile, Seed
from bench.cli.output import EXIT_STOPPED, note, report_error
from bench.errors import UsageError

__all__ = ["app", "main"]

app = typer.Typer(
    name="evenarm",
    help="Bring the two arms of a bench interferometer to zero optical path difference, "
    "and keep the evidence.",
    add_completion=False,
    no_args_is_help=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
    context_settings={"help_option_names": ["-h", "--help"]},
)

app.command("new", help="Write a bench folder with a simulated bench.")(new.command)
app.command("check", help="Check the bench description, procedures and devices.")(check.command)
app.command("plan", help="Show the search plan, its cost and its odds.")(plan.command)
app.command("run", help="Run a procedure here in the terminal.")(run.command)
app.command("fit", help="Locate the zero in recorded scans.")(fit.command)
app.add_typer(records.app, name="records", help="Read the journal and check its chain.")
app.command("drivers", help="List what can be plugged in.")(drivers.command)


def _show_version(wanted: bool) -> None:
    if wanted:
        typer.echo(f"evenarm {__version__}")
        raise typer.Exit(0)


@app.callback(invoke_without_command=True)
def start(
    context: typer.Context,
    bench: BenchFile = None,
    seed: Seed = None,
    pace: Annotated[
        str | None,
        typer.Option(
            "--pace", help="Simulated bench time: real, or how many times faster; 10 if not said."
        ),
    ] = None,
    version: Annotated[
        bool,
        typer.Option("--version", help="Show the version.", callback=_show_version, is_eager=True),
    ] = False,
) -> None:
    """Without a command: the terminal UI on this bench folder."""
    given = {"--bench": bench, "--seed": seed, "--pace": pace}
    command = context.invoked_subcommand
    if command is not None:
        for option, value in given.items():
            if value is not None:
                error = UsageError(
                    f"{option} stands before the command",
                    where=f"evenarm {option} ... {command}",
                    mend=f"give it after the command: evenarm {command} {option} ...",
                )
                raise typer.Exit(report_error(error, as_json=False))
    else:
        from bench.cli.screen import open_screen

        raise typer.Exit(open_screen(bench=bench, seed=seed, pace=pace or "10"))


def main() -> None:
    """Entry point of the ``evenarm`` command."""
    # Fits here are many and small: threads of the linear algebra only get in each other's way.
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    try:
        app()
    except KeyboardInterrupt:
        note("stopped by the operator")
        sys.exit(EXIT_STOPPED)
    except BrokenPipeError:
        sys.exit(EXIT_STOPPED)
