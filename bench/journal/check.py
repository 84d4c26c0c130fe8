"""The whole check of a journal; it reads, reports, and changes nothing."""

from __future__ import annotations

import json
import re
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from sqlalchemy import func, select
from sqlalchemy.engine import Connection

from bench.errors import JournalDamaged, UsageError, printable
from bench.journal.canonical import KIND, block_name, canonical_json, decode_block, number_text
from bench.journal.model import GENESIS, Entry, Verification
from bench.journal.place import refuse_unless_file
from bench.journal.rows import checked_entry
from bench.journal.schema import ABOUT, BLOCKS, DDL, ENTRIES, SCHEMA_VERSION
from bench.journal.store import Store, refuse_unless_journal

_TIME = re.compile(r"\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d\.\d{6}Z\Z", re.ASCII)
_NOTED = re.compile(r"[0-9a-f]{16,64}\Z")
_MOST_PROBLEMS = 1000


class _Findings:
    """What was found so far, bounded: a file of zeros must not fill the memory with complaints."""

    def __init__(self) -> None:
        self.problems: list[str] = []
        self._more = 0

    def add(self, text: str) -> None:
        if len(self.problems) < _MOST_PROBLEMS:
            self.problems.append(printable(text))
        else:
            self._more += 1

    def all(self) -> tuple[str, ...]:
        more = (f"and {self._more} more problems",) if self._more else ()
        return (*self.problems, *more)


@dataclass
class _Named:
    """The blocks that entries name, (entry, columns, rows) by name, and how far each scan is.

    ``unread`` are entries that do not agree with their hash: what they named is not known, so their
    blocks are not called unnamed on top of it.
    """

    blocks: dict[str, tuple[int, Any, Any]] = field(default_factory=dict)
    scans: dict[tuple[str | None, str], int] = field(default_factory=dict)
    unread: set[int] = field(default_factory=set)


def verify_journal(
    path: Path, progress: Callable[[int, int], None] | None, noted_heads: tuple[str, ...]
) -> Verification:
    """See ``bench.journal.verify``."""
    missing = {noted.strip().lower() for noted in noted_heads}
    for noted in sorted(missing):
        if not _NOTED.match(noted):
            raise UsageError(
                f"{noted[:80]!r} cannot be a head",
                where="--head",
                why="a noted head is at least 16 hex digits, at most 64",
                mend="copy it whole from where it was noted; `evenarm records list` shows today's",
            )
    refuse_unless_file(path, must_exist=True)
    found = _Findings()
    entries, head = 0, GENESIS
    store = _opened(path)
    try:
        try:
            with store.reading() as connection:
                _check_file(connection, found)
                entries, head, named = _check_chain(connection, path, found, missing, progress)
                _check_blocks(connection, found, named)
        except JournalDamaged as error:
            found.add(f"after entry {entries}: {error.why or error.what}")
    finally:
        store.close()
    for noted in sorted(missing):
        found.add(
            f"the noted head {noted[:16]} is not in this journal: entries were cut or rewritten"
        )
    problems = found.all()
    return Verification(entries, not problems, head, problems)


def _opened(path: Path) -> Store:
    """The file as a journal; where it is too damaged to be read at all, verify is what ran."""
    try:
        store = Store(path, write=False)
        try:
            refuse_unless_journal(store)
        except BaseException:
            store.close()
            raise
    except JournalDamaged as error:
        raise JournalDamaged(
            error.what,
            where=error.where,
            why=error.why,
            mend="keep the file as it is, for it may hold more than can be read here, and go back "
            "to a copy",
        ) from None
    return store


def _check_file(connection: Connection, found: _Findings) -> None:
    """The database's own structure: pages, indexes against tables, and our tables and guards."""
    for (line,) in connection.exec_driver_sql("PRAGMA integrity_check"):
        if line != "ok":
            found.add(f"the file: {line}")
    for row in connection.exec_driver_sql("PRAGMA foreign_key_check"):
        found.add(f"block {row[1]} belongs to no entry")
    held = {
        row[0]: (row[1], row[2])
        for row in connection.exec_driver_sql("SELECT name, tbl_name, sql FROM sqlite_master")
    }
    for name, text in DDL.items():
        if name not in held:
            found.add(f"the file: {name} is missing")
        elif held[name][1] != text:
            found.add(f"the file: the definition of {name} was changed")
    for name, (table, text) in held.items():
        if name not in DDL and table in ("entries", "blocks", "journal_schema") and text:
            found.add(f"the file: {name} was added to {table}")
    versions = connection.exec_driver_sql("SELECT version, about FROM journal_schema").all()
    if [tuple(row) for row in versions] != [(SCHEMA_VERSION, ABOUT)]:
        found.add("the file: the description of the schema was changed")


def _check_chain(
    connection: Connection,
    path: Path,
    found: _Findings,
    missing: set[str],
    progress: Callable[[int, int], None] | None,
) -> tuple[int, str, _Named]:
    total = connection.execute(select(func.count()).select_from(ENTRIES)).scalar_one()
    prev, expected, done = GENESIS, 1, 0
    named = _Named()
    rows = connection.execute(
        select(ENTRIES).order_by(ENTRIES.c.seq), execution_options={"yield_per": 500}
    )
    for row in rows:
        seq, sha256 = row[0], row[7]
        if seq != expected:
            found.add(f"entry {seq} comes where entry {expected} is due")
        try:
            entry = checked_entry(tuple(row), path)
        except JournalDamaged as error:
            found.add(error.why)
            named.unread.add(seq)
        else:
            _check_entry(entry, row, found)
            if entry.kind == "readings":
                _check_readings(entry, found, named)
        if row[6] != prev:
            found.add(f"entry {seq}: it does not name the entry before it")
        prev = sha256 if isinstance(sha256, str) else ""
        missing -= {noted for noted in missing if prev.startswith(noted)}
        expected, done = seq + 1, done + 1
        if progress is not None and (done % 500 == 0 or done == total):
            progress(done, total)
    return done, printable(prev, 64), named


def _check_entry(entry: Entry, row: Any, found: _Findings) -> None:
    """What the hash cannot tell: that the content was in the one form that stands for it."""
    try:
        canonical = canonical_json(entry.body) == row[5]
        bench_time = number_text(entry.bench_time_s) == row[2]
    except (ValueError, RecursionError):
        canonical = bench_time = False
    if not canonical:
        found.add(f"entry {entry.seq}: its body is not in canonical form")
    if not bench_time:
        found.add(f"entry {entry.seq}: its bench time is not in canonical form")
    if not _TIME.match(entry.time_utc):
        found.add(f"entry {entry.seq}: its time is not in canonical form")
    if not KIND.match(entry.kind):
        found.add(f"entry {entry.seq}: its kind is not in canonical form")
    if entry.run is not None and (not entry.run or not entry.run.isprintable()):
        found.add(f"entry {entry.seq}: its run is not in canonical form")


def _check_readings(entry: Entry, found: _Findings, named: _Named) -> None:
    body = entry.body
    name, sequence = body.get("block"), body.get("sequence")
    if not isinstance(name, str):
        found.add(f"entry {entry.seq}: it names no block of readings")
        return
    columns = body.get("columns")
    named.blocks.setdefault(name, (entry.seq, columns, body.get("rows")))
    scan = (entry.run, json.dumps(body.get("scan")))
    due = named.scans.get(scan, 0)
    if sequence != due:
        found.add(f"entry {entry.seq}: block {due} of its scan is due, not {sequence}")
    named.scans[scan] = (sequence if isinstance(sequence, int) else due) + 1


def _check_blocks(connection: Connection, found: _Findings, named: _Named) -> None:
    kept: set[str] = set()
    rows = connection.execute(
        select(BLOCKS).order_by(BLOCKS.c.entry), execution_options={"yield_per": 20}
    )
    for seq, name, data in rows:
        by, columns, count = named.blocks.get(name if isinstance(name, str) else "", (0, [], 0))
        if by != seq and seq not in named.unread:
            found.add(f"the block at entry {seq} is named by no entry")
        elif not isinstance(data, bytes) or block_name(data) != name:
            found.add(f"entry {seq}: its readings do not agree with their hash")
        elif by == seq and _shape(data) != (columns, count):
            found.add(f"entry {seq}: its readings are not the columns and rows that it says")
        if isinstance(name, str):
            kept.add(name)
    for name, (seq, _, _) in named.blocks.items():
        if name not in kept:
            found.add(f"entry {seq}: its readings are missing")


def _shape(data: bytes) -> tuple[list[str], int] | None:
    try:
        columns = decode_block(data)
    except ValueError:
        return None
    return list(columns), len(next(iter(columns.values()), ()))
