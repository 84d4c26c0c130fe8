"""``evenarm new DIR``: a bench folder to start from."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from bench.cli.output import emit_json, report_error
from bench.errors import EvenarmError, UsageError, printable

__all__ = ["FILES", "command", "write_bench_folder"]

FILES = ("bench.toml", "world.toml", "procedures/README", "logs/README")


def command(
    folder: Annotated[Path, typer.Argument(metavar="DIR", help="The folder to write.")],
    as_json: Annotated[bool, typer.Option("--json", help="One JSON document.")] = False,
) -> None:
    """Write a bench folder with a simulated bench. Nothing that is there is overwritten."""
    try:
        written = write_bench_folder(folder)
    except EvenarmError as error:
        raise typer.Exit(report_error(error, as_json=as_json)) from None
    if as_json:
        emit_json(
            {
                "schema": "evenarm.new/1",
                "folder": str(folder.absolute()),
                "files": [str(path) for path in written],
            }
        )
        return
    import shlex

    typer.echo(f"wrote {printable(folder)}:")
    for name, purpose in zip(
        FILES,
        (
            "what stands on the table: start here",
            "the hidden truth of the simulated bench",
            "what belongs into this folder: your own procedures",
            "what belongs into this folder: the journal",
        ),
        strict=True,
    ):
        typer.echo(f"  {name:<18} {purpose}")
    typer.echo("next:")
    for line, purpose in (
        (f"cd {printable(shlex.quote(str(folder)))}", ""),
        ("evenarm check", "how the bench is understood, and what is wrong"),
        ("evenarm plan", "how the search will go"),
        ("evenarm", "bring the arms to zero, here in the terminal"),
        ("evenarm run path-equalisation --unattended", "the same from a script"),
    ):
        typer.echo(f"  {line:<44} {purpose}".rstrip())


def write_bench_folder(folder: Path) -> list[Path]:
    """Write the files and give their absolute paths. Raises UsageError; then nothing was changed.

    Files are created exclusively, so that two at once cannot overwrite each other.
    """
    import importlib.resources
    import os

    where = str(folder)
    elsewhere = "give another folder, or move what is there"
    if os.path.lexists(folder) and not folder.is_dir():
        raise UsageError(
            "the folder cannot be written", where=where, why="a file has that name", mend=elsewhere
        )
    there = [name for name in FILES if os.path.lexists(folder / name)]
    if there:
        raise UsageError(
            "a bench is there already" if "bench.toml" in there else "files are in the way",
            where=where,
            why=f"{', '.join(there)} would be overwritten",
            mend=elsewhere,
        )
    shipped = importlib.resources.files("bench") / "shipped" / "default"
    made: list[Path] = []
    try:
        for name in FILES:
            target = folder / name
            _make_folders(target.parent, made)
            text = (shipped / name).read_text(encoding="utf-8")
            with open(target, "x", encoding="utf-8") as file:
                made.append(target)
                file.write(text)
    except OSError as error:
        for path in reversed(made):
            _undo(path)
        raise UsageError(
            "the folder cannot be written",
            where=str(error.filename or where),
            why=error.strerror or str(error),
            mend="give a folder that you may write to",
        ) from None
    return [(folder / name).absolute() for name in FILES]


def _make_folders(folder: Path, made: list[Path]) -> None:
    missing = []
    while not folder.exists():
        missing.append(folder)
        folder = folder.parent
    for path in reversed(missing):
        path.mkdir()
        made.append(path)


def _undo(path: Path) -> None:
    import contextlib

    with contextlib.suppress(OSError):
        if path.is_dir():
            path.rmdir()
        else:
            path.unlink()
