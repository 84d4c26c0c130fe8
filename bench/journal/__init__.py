"""The journal: append-only, hash-chained, durable. Everything that happened in a run is in it.

``canonical`` documents the form on disk so that it can be checked without Evenarm. The database
library is loaded by the first call, not by the import.
"""

from __future__ import annotations

import os
from collections.abc import Callable
from datetime import datetime
from typing import TYPE_CHECKING, Any

from bench.journal.model import (
    GENESIS,
    Entry,
    Head,
    MeasurementRecord,
    RunSummary,
    Verification,
)

if TYPE_CHECKING:
    from bench.journal.book import Journal

__all__ = [
    "GENESIS",
    "Entry",
    "Head",
    "Journal",
    "MeasurementRecord",
    "RunSummary",
    "Verification",
    "finite",
    "measurements",
    "open_journal",
    "runs",
    "verify",
]

Url = str | os.PathLike[str]


def __getattr__(name: str) -> Any:
    if name == "Journal":
        from bench.journal.book import Journal

        return Journal
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")


def open_journal(
    url: Url, *, write: bool, who: str = "", now: Callable[[], datetime] | None = None
) -> Journal:
    """Open the journal at ``sqlite:///file`` or at a plain path.

    For writing, the file and its folder are made where they are missing, and the newest entries are
    checked first. ``who`` is told to whoever wants to write meanwhile. ``now`` gives the time of
    entries and must know its zone; None is this computer's clock.

    Raises JournalHeld where another writes, JournalDamaged, and JournalError for anything else:
    no such file when reading, a folder, another program's file, a newer version, no permission.
    """
    from bench.journal.book import open_for_reading, open_for_writing, utc_now
    from bench.journal.place import journal_path

    path = journal_path(url)
    if write:
        return open_for_writing(path, who=who or "Evenarm", now=now or utc_now)
    return open_for_reading(path, now=now or utc_now)


def verify(
    url: Url,
    progress: Callable[[int, int], None] | None = None,
    *,
    noted_heads: tuple[str, ...] = (),
) -> Verification:
    """Check every byte that anything reads: chain, hashes, canonical form, blocks, tables, indexes.

    ``progress`` is told (entries done, entries in all). A chain that was cut at its end still
    agrees with itself; only a head noted elsewhere tells, so each of ``noted_heads`` (at least 16
    hex digits) must be the hash of an entry. Damage is reported, not raised; raises JournalError
    where there is no journal or it cannot be opened.
    """
    from bench.journal.check import verify_journal
    from bench.journal.place import journal_path

    return verify_journal(journal_path(url), progress, noted_heads)


def runs(source: Journal | Url) -> list[RunSummary]:
    """All runs of a journal, oldest first. Raises JournalError."""
    from bench.journal.find import all_runs, opened

    with opened(source) as journal:
        return all_runs(journal)


def measurements(source: Journal | Url, run: str | None = None) -> list[MeasurementRecord]:
    """All measurements of a journal or of one run, oldest first. Raises JournalError."""
    from bench.journal.find import all_measurements, opened

    with opened(source) as journal:
        return all_measurements(journal, run)


def finite(value: Any) -> Any:
    """``value`` with null for every number that is not finite, which no body may hold."""
    from bench.journal.canonical import finite as cleaned

    return cleaned(value)
