"""An open journal: appending durably, and reading back what was written."""

from __future__ import annotations

import os
import threading
from collections.abc import Callable, Collection, Iterator, Mapping
from datetime import UTC, datetime
from pathlib import Path
from types import TracebackType
from typing import Any

import numpy as np
from sqlalchemy import bindparam, func, insert, select
from sqlalchemy.engine import Connection

from bench.errors import JournalError
from bench.journal.canonical import (
    KIND,
    FloatArray,
    block_name,
    canonical_json,
    decode_block,
    encode_block,
    entry_hash,
    number_text,
    time_text,
)
from bench.journal.model import GENESIS, Entry, Head
from bench.journal.place import (
    Hold,
    make_durably,
    refuse_unless_file,
    take_hold,
)
from bench.journal.rows import checked_entry, damaged
from bench.journal.schema import BLOCKS, ENTRIES
from bench.journal.store import Store, prepare, refuse_unless_journal, use_log

_CHUNK = 500
_TAIL = 200

# Built once: building a statement costs more than running it.
_NEWEST = select(ENTRIES.c.seq, ENTRIES.c.sha256).order_by(ENTRIES.c.seq.desc()).limit(1)
_BLOCK = select(BLOCKS.c.bytes).where(BLOCKS.c.name == bindparam("wanted"))
_ADD_ENTRY = insert(ENTRIES)
_ADD_BLOCK = insert(BLOCKS)


def utc_now() -> datetime:
    """This computer's clock, in UTC."""
    return datetime.now(UTC)


class Journal:
    """An append-only chain of entries in one file. Made by ``open_journal``; used from any thread.

    Every method raises JournalError where the file does not allow what is asked, JournalDamaged
    where what is read does not agree with its hash.
    """

    def __init__(
        self, path: Path, store: Store, hold: Hold | None, now: Callable[[], datetime]
    ) -> None:
        self.path = path
        self._store = store
        self._hold = hold
        self._now = now
        self._lock = threading.RLock()
        self._sequences: dict[tuple[str, str], int] = {}
        self._identity = _identity(path)
        self._head = self._read_head()
        self._opened_at = self._head.entries

    def __enter__(self) -> Journal:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    @property
    def head(self) -> Head:
        """The newest link; a reader asks the file each time."""
        with self._lock:
            return self._head if self._hold is not None else self._read_head()

    def append(
        self,
        kind: str,
        body: Mapping[str, Any],
        *,
        run: str | None = None,
        bench_time_s: float | None = None,
    ) -> Entry:
        """Write one entry; it is on the disk when this returns, and not there at all if it raises.

        Raises ValueError for a kind, run or body that cannot be written, a number that is not
        finite among it; JournalError where the file does not take it.
        """
        return self._write(kind, canonical_json(body), run, bench_time_s, None)

    def append_readings(
        self,
        run: str,
        scan: str,
        columns: Mapping[str, FloatArray],
        *,
        bench_time_s: float | None = None,
    ) -> Entry:
        """Write readings, columns of one shape (n,), and the entry that names them, as one.

        Blocks of one scan are numbered from 0. Values are kept to the last bit, NaN too. Raises as
        ``append`` does.
        """
        data = encode_block(columns)
        with self._lock:
            sequence = self._next_sequence(run, scan)
            body = {
                "block": block_name(data),
                "columns": list(columns),
                "rows": len(next(iter(columns.values()))),
                "scan": scan,
                "sequence": sequence,
            }
            entry = self._write("readings", canonical_json(body), run, bench_time_s, data)
            self._sequences[run, scan] = sequence + 1
            return entry

    def entries(
        self, run: str | None = None, kinds: Collection[str] | None = None, after: int = 0
    ) -> Iterator[Entry]:
        """Entries in order with ``seq`` > ``after``, of one run and of some kinds where given.

        Each is checked against its own hash as it is read. Raises JournalDamaged.
        """
        return self._entries(run, kinds, after, 2**62)

    def _entries(
        self, run: str | None, kinds: Collection[str] | None, after: int, upto: int
    ) -> Iterator[Entry]:
        last = after
        asked = select(ENTRIES).where(ENTRIES.c.seq <= upto).order_by(ENTRIES.c.seq)
        if run is not None:
            asked = asked.where(ENTRIES.c.run == run)
        if kinds is not None:
            # Where the run is given, its index is the one to use: joining the kind with an empty
            # text keeps the database from walking through that kind of all runs.
            kind = ENTRIES.c.kind if run is None else ENTRIES.c.kind + ""
            asked = asked.where(kind.in_(sorted(kinds)))
        while True:
            query = asked.where(ENTRIES.c.seq > last)
            with self._store.reading() as connection:
                rows = connection.execute(query.limit(_CHUNK)).all()
            for row in rows:
                entry = checked_entry(tuple(row), self.path)
                if entry.seq <= last:
                    raise damaged(self.path, f"entry {entry.seq} comes after entry {last}")
                last = entry.seq
                yield entry
            if len(rows) < _CHUNK:
                return

    def entry(self, seq: int) -> Entry | None:
        """One entry, None where there is none of that number. Raises JournalDamaged."""
        if not 0 < seq < 2**63:
            return None
        with self._store.reading() as connection:
            row = connection.execute(select(ENTRIES).where(ENTRIES.c.seq == seq)).first()
        return None if row is None else checked_entry(tuple(row), self.path)

    def entries_by_run(self) -> dict[str, int]:
        """How many entries each run has."""
        query = select(ENTRIES.c.run, func.count()).group_by(ENTRIES.c.run)
        with self._store.reading() as connection:
            return {row[0]: row[1] for row in connection.execute(query) if isinstance(row[0], str)}

    def readings(self, run: str, scan: str) -> dict[str, FloatArray]:
        """All readings of a scan so far, each column of shape (n,); empty where there are none.

        Raises JournalDamaged where a block is missing or does not agree with its hash.
        """
        found = self.entries(run, ("readings",))
        parts = [self.block(entry) for entry in found if entry.body.get("scan") == scan]
        if not parts:
            return {}
        if any(list(part) != list(parts[0]) for part in parts):
            raise damaged(self.path, f"the blocks of scan {scan} have different columns")
        return {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}

    def block(self, entry: Entry) -> dict[str, FloatArray]:
        """The readings that one entry of kind ``readings`` names. Raises JournalDamaged."""
        name = entry.body.get("block")
        if not isinstance(name, str):
            raise damaged(self.path, f"entry {entry.seq}: it names no block of readings")
        with self._store.reading() as connection:
            row = connection.execute(_BLOCK, {"wanted": name}).first()
        if row is None or not isinstance(row[0], bytes) or block_name(row[0]) != name:
            raise damaged(self.path, f"entry {entry.seq}: its readings are missing or changed")
        try:
            return decode_block(row[0])
        except ValueError as error:
            raise damaged(self.path, f"entry {entry.seq}: {error}") from error

    def close(self) -> None:
        """Let go of the file and of the writer's lock. Idempotent."""
        with self._lock:
            try:
                self._store.close()
            finally:
                hold, self._hold = self._hold, None
                if hold is not None:
                    hold.release()

    # --- inside ----------------------------------------------------------------------------------

    def _next_sequence(self, run: str, scan: str) -> int:
        known = self._sequences.get((run, scan))
        if known is None:  # then any blocks of it were there before this journal was opened
            earlier = self._entries(run, ("readings",), 0, self._opened_at)
            known = sum(1 for entry in earlier if entry.body.get("scan") == scan)
        return known

    def _read_head(self) -> Head:
        with self._store.reading() as connection:
            return _head(connection, self.path)

    def _write(
        self,
        kind: str,
        body: str,
        run: str | None,
        bench_time_s: float | None,
        block: bytes | None,
    ) -> Entry:
        if not KIND.match(kind):
            raise ValueError(f"a kind is lower-case letters, digits and hyphens, not {kind!r}")
        if run is not None and (not run or len(run) > 200 or not run.isprintable()):
            raise ValueError(f"a run's name is 1 to 200 printable characters, not {run!r}")
        with self._lock:
            if self._hold is None:
                raise JournalError(
                    "The journal is open for reading only, or closed",
                    where=str(self.path),
                    mend="open it for writing",
                )
            if _identity(self.path) != self._identity:
                raise JournalError(
                    "The journal's file was moved, removed or replaced while in use",
                    where=str(self.path),
                    mend="put the file back and start the run again",
                )
            row: dict[str, Any] = {
                "seq": self._head.entries + 1,
                "time_utc": time_text(self._now()),
                "bench_time_s": number_text(bench_time_s),
                "kind": kind,
                "run": run,
                "body": body,
                "prev": self._head.sha256,
            }
            row["sha256"] = entry_hash(**row)
            with self._store.writing() as connection:
                if _head(connection, self.path) != self._head:
                    raise damaged(self.path, "something else wrote to it during this run")
                connection.execute(_ADD_ENTRY, row)
                if block is not None:
                    self._keep_block(connection, row["seq"], block)
            self._head = Head(row["seq"], row["sha256"])
        return checked_entry(tuple(row[column.name] for column in ENTRIES.columns), self.path)

    def _keep_block(self, connection: Connection, seq: int, data: bytes) -> None:
        name = block_name(data)
        there = connection.execute(_BLOCK, {"wanted": name}).first()
        if there is None:
            connection.execute(_ADD_BLOCK, {"entry": seq, "name": name, "bytes": data})
        elif there[0] != data:
            raise damaged(self.path, f"the block {name[:16]} is not what its name says")


def open_for_writing(path: Path, *, who: str, now: Callable[[], datetime]) -> Journal:
    """The only writer of the journal at ``path``, which is made where it is not there."""
    refuse_unless_file(path, must_exist=False)
    make_durably(path)
    hold = take_hold(path, who=who, since_utc=time_text(now()))
    store = None
    try:
        store = Store(path, write=True)
        prepare(store)
        refuse_unless_journal(store)
        use_log(store)
        journal = Journal(path, store, hold, now)
        _check_tail(journal)
        with store.writing() as connection:
            # Writes the header as it is: a file that takes nothing is found before the first move.
            connection.exec_driver_sql("PRAGMA user_version=0")
    except BaseException:
        if store is not None:
            store.close()
        hold.release()
        raise
    return journal


def open_for_reading(path: Path, *, now: Callable[[], datetime]) -> Journal:
    """One of many readers; never writes to the journal's file, also while another writes."""
    refuse_unless_file(path, must_exist=True)
    store = Store(path, write=False)
    try:
        refuse_unless_journal(store)
        return Journal(path, store, None, now)
    except BaseException:
        store.close()
        raise


def _head(connection: Connection, path: Path) -> Head:
    row = connection.execute(_NEWEST).first()
    if row is None:
        return Head(0, GENESIS)
    if not isinstance(row[1], str):
        raise damaged(path, f"entry {row[0]}: its hash is not text")
    return Head(row[0], row[1])


def _check_tail(journal: Journal) -> None:
    """The last entries link to each other and have their readings. Raises JournalDamaged."""
    first = max(1, journal.head.entries - _TAIL)
    prev = GENESIS if first == 1 else None
    expected = first
    for entry in journal.entries(after=first - 1):
        if entry.seq != expected or (prev is not None and entry.prev != prev):
            raise damaged(journal.path, f"entry {entry.seq} does not follow entry {expected - 1}")
        if entry.kind == "readings":
            journal.block(entry)
        prev, expected = entry.sha256, entry.seq + 1


def _identity(path: Path) -> tuple[int, int] | None:
    try:
        status = os.stat(path)
    except OSError:
        return None
    return status.st_dev, status.st_ino
