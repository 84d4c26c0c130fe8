"""The tables of a journal, frozen word for word: verification compares them with what a file holds.

A change of any of these texts is a new schema version with a migration, never an edit.
"""

from __future__ import annotations

from typing import Any

from sqlalchemy import Column, Integer, LargeBinary, MetaData, Table, Text

APPLICATION_ID = 0x4576_6E61  # "Evna"
SCHEMA_VERSION = 1

ABOUT = (
    "A journal of Evenarm. Rows of entries form a chain: sha256 is the SHA-256, in hex, of these"
    " eight lines joined by line feeds: evenarm.entry/1, prev, seq, time_utc, bench_time_s (empty"
    " if null), kind, run (empty if null), body. prev is sha256 of the row before, 64 zeros in the"
    " first. blocks.name is the SHA-256 of blocks.bytes: a line of JSON that names columns and"
    " rows, then each column as little-endian 64-bit floats."
)

DDL: dict[str, str] = {
    "journal_schema": (
        "CREATE TABLE journal_schema (version INTEGER PRIMARY KEY, about TEXT NOT NULL)"
    ),
    "entries": (
        "CREATE TABLE entries (seq INTEGER PRIMARY KEY, time_utc TEXT NOT NULL, bench_time_s TEXT,"
        " kind TEXT NOT NULL, run TEXT, body TEXT NOT NULL, prev TEXT NOT NULL,"
        " sha256 TEXT NOT NULL)"
    ),
    "blocks": (
        "CREATE TABLE blocks (entry INTEGER PRIMARY KEY REFERENCES entries (seq),"
        " name TEXT NOT NULL UNIQUE, bytes BLOB NOT NULL)"
    ),
    "entries_by_run": "CREATE INDEX entries_by_run ON entries (run, seq)",
    "entries_by_kind": "CREATE INDEX entries_by_kind ON entries (kind, seq)",
    # Inserting "or replace" deletes without a delete trigger, so this one guards against it too.
    "entries_follow": (
        "CREATE TRIGGER entries_follow BEFORE INSERT ON entries"
        " WHEN NEW.seq IS NOT (SELECT coalesce(max(seq), 0) + 1 FROM entries)"
        " OR NEW.prev IS NOT coalesce((SELECT sha256 FROM entries ORDER BY seq DESC LIMIT 1),"
        " '0000000000000000000000000000000000000000000000000000000000000000')"
        " BEGIN SELECT raise(ABORT, 'an entry follows the last one'); END"
    ),
    "blocks_new": (
        "CREATE TRIGGER blocks_new BEFORE INSERT ON blocks"
        " WHEN EXISTS (SELECT 1 FROM blocks WHERE entry = NEW.entry OR name = NEW.name)"
        " BEGIN SELECT raise(ABORT, 'the journal is append-only'); END"
    ),
    "schema_new": (
        "CREATE TRIGGER schema_new BEFORE INSERT ON journal_schema"
        " WHEN EXISTS (SELECT 1 FROM journal_schema WHERE version >= NEW.version)"
        " BEGIN SELECT raise(ABORT, 'the journal is append-only'); END"
    ),
} | {
    f"{table}_no_{verb}": (
        f"CREATE TRIGGER {table}_no_{verb} BEFORE {verb.upper()} ON {table}"
        " BEGIN SELECT raise(ABORT, 'the journal is append-only'); END"
    )
    for table in ("journal_schema", "entries", "blocks")
    for verb in ("update", "delete")
}


class _Bytes(LargeBinary):
    """Bytes as the file holds them: a damaged file may hold anything, and readers check."""

    def result_processor(self, dialect: Any, coltype: Any) -> None:
        return None


_metadata = MetaData()

ENTRIES = Table(
    "entries",
    _metadata,
    Column("seq", Integer, primary_key=True),
    Column("time_utc", Text, nullable=False),
    Column("bench_time_s", Text),
    Column("kind", Text, nullable=False),
    Column("run", Text),
    Column("body", Text, nullable=False),
    Column("prev", Text, nullable=False),
    Column("sha256", Text, nullable=False),
)

BLOCKS = Table(
    "blocks",
    _metadata,
    Column("entry", Integer, primary_key=True),
    Column("name", Text, nullable=False),
    Column("bytes", _Bytes, nullable=False),
)
