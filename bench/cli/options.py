"""Options that several commands share, said once."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

__all__ = ["BenchFile", "Seed"]

BenchFile = Annotated[Path | None, typer.Option("--bench", help="The bench description to use.")]
Seed = Annotated[
    int | None, typer.Option("--seed", help="Seed of a simulated bench's hidden truth.")
]
