"""Which bench a command works on, read and checked."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

from bench.cli.output import note
from bench.errors import UsageError

if TYPE_CHECKING:
    from bench.spec.model import BenchSpec

__all__ = ["open_bench"]


def open_bench(option: Path | None, seed: int | None = None) -> BenchSpec:
    """The bench of ``--bench``, of the current folder, or the shipped one.

    The shipped bench is announced on standard error in one line, and keeps its journal in ``logs``
    of the current folder. Raises InputError and SpecError.
    """
    if seed is not None and not 0 <= seed < 2**63:
        raise UsageError(
            f"{seed} cannot be a seed",
            where="--seed",
            why="it must be a whole number from 0, below 2^63",
            mend="give another, or leave the option out: then the bench's own counts",
        )
    from bench.spec import find_bench, load_bench
    from drivers import registry

    cwd = Path.cwd()
    found = find_bench(option, cwd)
    if found.shipped:
        note("no bench.toml here: using the simulated bench that comes with Evenarm")
    return load_bench(
        found.path,
        declared=registry.declared,
        known_drivers=registry.names,
        records_folder=cwd / "logs" if found.shipped else None,
        seed=seed,
    )
