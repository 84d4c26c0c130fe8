"""``evenarm`` without a command: the terminal UI on this bench folder."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import typer

from bench.cli.output import report_error
from bench.errors import EvenarmError

if TYPE_CHECKING:
    from bench.procedure.session import RunSession

__all__ = ["open_screen"]

MAIN_JOB = "path-equalisation"


def _say_again(session: RunSession) -> None:
    """What the screen showed last is gone with it; the shell keeps the result."""
    state = session.state
    if state is not None and state.outcome is not None:
        from bench.cli.run import result_document, result_lines

        typer.echo("\n".join(result_lines(result_document(session, state))))


def open_screen(*, bench: Path | None, seed: int | None, pace: str) -> int:
    """Show the main job on the screen, ready to begin; returns the exit status."""
    try:
        from bench.tui.run import require_terminal, run_app

        require_terminal()
        from bench.cli.run import Asked, new_session

        session = new_session(Asked(MAIN_JOB, bench=bench, seed=seed, pace=pace))
        status = run_app(session)
        _say_again(session)
        return status
    except EvenarmError as error:
        return report_error(error, as_json=False)
