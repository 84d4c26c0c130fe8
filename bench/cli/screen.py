"""``evenarm`` without a command: the terminal UI on this bench folder."""

from __future__ import annotations

from pathlib import Path

from bench.cli.output import report_error
from bench.errors import EvenarmError

__all__ = ["open_screen"]

MAIN_JOB = "path-equalisation"


def open_screen(*, bench: Path | None, seed: int | None, pace: str) -> int:
    """Show the main job on the screen, ready to begin; returns the exit status."""
    try:
        from bench.tui.run import require_terminal, run_app

        require_terminal()
        from bench.cli.run import Asked, new_session

        session = new_session(Asked(MAIN_JOB, bench=bench, seed=seed, pace=pace))
        return run_app(session)
    except EvenarmError as error:
        return report_error(error, as_json=False)
