"""The SQLite file under a journal: connections, transactions, and what SQLite's complaints mean."""

from __future__ import annotations

import sqlite3
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any
from urllib.parse import quote

from sqlalchemy import create_engine, event
from sqlalchemy.engine import Connection
from sqlalchemy.exc import DBAPIError, SQLAlchemyError
from sqlalchemy.pool import StaticPool

from bench.errors import JournalDamaged, JournalError
from bench.journal.place import unusable
from bench.journal.schema import ABOUT, APPLICATION_ID, DDL, SCHEMA_VERSION

_BUSY_TIMEOUT_S = 5.0


def _text(raw: bytes) -> str:
    # Damaged bytes must come out as something that can be hashed and reported, not as an exception.
    return raw.decode("utf-8", "surrogateescape")


def _connect(path: Path, mode: str) -> sqlite3.Connection:
    connection = sqlite3.connect(
        f"file:{quote(bytes(path))}?{mode}",
        uri=True,
        timeout=_BUSY_TIMEOUT_S,
        isolation_level=None,  # this module says BEGIN itself: the default begins too late
        check_same_thread=False,
    )
    connection.text_factory = _text
    pragmas = ["foreign_keys=ON", "trusted_schema=OFF", "cell_size_check=ON"]
    if mode == "mode=rw":
        pragmas.append("synchronous=FULL")
    try:
        for pragma in pragmas:
            connection.execute(f"PRAGMA {pragma}")
    except BaseException:
        connection.close()
        raise
    return connection


class Store:
    """One connection to one file, used by one thread at a time.

    ``reading`` and ``writing`` are transactions; both raise JournalError for whatever goes wrong in
    the file, and a failed writing leaves nothing behind.
    """

    def __init__(self, path: Path, *, write: bool) -> None:
        self.path = path
        self._lock = threading.RLock()
        self._begin = "BEGIN"
        with self._translated():
            if write:
                self._connection = self._open("mode=rw")
            else:
                self._connection = self._open_for_reading()

    def _open(self, mode: str) -> Connection:
        engine = create_engine(
            "sqlite+pysqlite://", creator=lambda: _connect(self.path, mode), poolclass=StaticPool
        )
        event.listen(engine, "begin", lambda connection: connection.exec_driver_sql(self._begin))
        return engine.connect()

    def _open_for_reading(self) -> Connection:
        connection = self._open("mode=ro")
        try:
            with connection.begin():
                connection.exec_driver_sql("SELECT count(*) FROM sqlite_master").scalar()
        except DBAPIError as error:
            connection.close()
            connection.engine.dispose()
            # In a folder that cannot be written SQLite cannot coordinate with a writer; where no
            # write-ahead log lies there, no writer is at work and the file is whole by itself.
            log = self.path.with_name(self.path.name + "-wal")
            if _code(error) & 0xFF in (sqlite3.SQLITE_CANTOPEN, sqlite3.SQLITE_READONLY) and (
                not log.exists() or log.stat().st_size == 0
            ):
                return self._open("mode=ro&immutable=1")
            raise
        except BaseException:
            connection.close()
            connection.engine.dispose()
            raise
        return connection

    @contextmanager
    def _translated(self) -> Iterator[None]:
        try:
            yield
        except (SQLAlchemyError, sqlite3.Error, UnicodeDecodeError) as error:
            # The last: SQLite quotes damaged bytes in a message that Python cannot read as text.
            raise _explained(error, self.path) from error

    @contextmanager
    def reading(self) -> Iterator[Connection]:
        """A snapshot of the file for as long as the block lasts. Raises JournalError."""
        with self._transaction("BEGIN") as connection:
            yield connection

    @contextmanager
    def writing(self) -> Iterator[Connection]:
        """Durable when the block has ended without an exception. Raises JournalError."""
        with self._transaction("BEGIN IMMEDIATE") as connection:
            yield connection

    @contextmanager
    def _transaction(self, begin: str) -> Iterator[Connection]:
        with self._lock, self._translated():
            self._begin = begin
            try:
                with self._connection.begin():
                    yield self._connection
            except BaseException:
                # A COMMIT that failed may leave SQLite inside the transaction; the next one must
                # not find it there, nor ever commit what was not acknowledged.
                raw = None if self._connection.closed else self._raw()
                if raw is not None and raw.in_transaction:
                    raw.rollback()
                raise

    def pragma(self, text: str) -> Any:
        """The first value that ``PRAGMA text`` gives, outside any transaction."""
        with self._lock, self._translated():
            row = self._raw().execute(f"PRAGMA {text}").fetchone()
            return None if row is None else row[0]

    def _raw(self) -> sqlite3.Connection:
        raw: Any = self._connection.connection.dbapi_connection
        assert isinstance(raw, sqlite3.Connection)
        return raw

    def close(self) -> None:
        with self._lock, self._translated():
            self._connection.close()
            self._connection.engine.dispose()


def prepare(store: Store) -> None:
    """Make the schema in a new or empty file. Raises JournalError where something else is there."""
    with store.reading() as connection:
        objects = connection.exec_driver_sql("SELECT count(*) FROM sqlite_master").scalar()
    if objects:
        return
    use_log(store)
    with store.writing() as connection:
        connection.exec_driver_sql(f"PRAGMA application_id={APPLICATION_ID}")
        for statement in DDL.values():
            connection.exec_driver_sql(statement)
        connection.exec_driver_sql(
            "INSERT INTO journal_schema (version, about) VALUES (?, ?)", (SCHEMA_VERSION, ABOUT)
        )


def use_log(store: Store) -> None:
    """Switch the file to a write-ahead log, so that readers and the writer do not wait."""
    if store.pragma("journal_mode=WAL") != "wal":
        raise JournalError(
            "The journal's file system cannot keep a write-ahead log",
            where=str(store.path),
            mend="keep the journal on a local disk",
        )


def refuse_unless_journal(store: Store) -> None:
    """Raise JournalError where the file is no journal, or one that this version cannot read."""
    with store.reading() as connection:
        identity = connection.exec_driver_sql("PRAGMA application_id").scalar()
        tables = connection.exec_driver_sql("SELECT count(*) FROM sqlite_master").scalar()
        if identity != APPLICATION_ID:
            raise unusable(
                "The file is not a journal" if tables else "The file is empty and no journal yet",
                where=str(store.path),
                why="it does not carry the mark of a journal in its header",
                mend="name the journal's own file; a run writes a new one where there is none",
            )
        version = connection.exec_driver_sql("SELECT max(version) FROM journal_schema").scalar()
    if not isinstance(version, int) or version < 1:
        raise JournalDamaged(
            "The journal does not say its version",
            where=str(store.path),
            mend="run evenarm records verify, and go back to a copy",
        )
    if version > SCHEMA_VERSION:
        raise unusable(
            "The journal was written by a newer Evenarm",
            where=str(store.path),
            why=f"its schema is version {version}, this program knows up to {SCHEMA_VERSION}",
            mend="use the newer program; nothing has been changed in the file",
        )


def _code(error: BaseException) -> int:
    original = error.orig if isinstance(error, DBAPIError) else error
    code = getattr(original, "sqlite_errorcode", None)
    return code if isinstance(code, int) else sqlite3.SQLITE_ERROR


def _explained(error: BaseException, path: Path) -> JournalError:
    original = error.orig if isinstance(error, DBAPIError) else error
    said = str(original)
    where = str(path)
    code = _code(error) & 0xFF
    if code == sqlite3.SQLITE_FULL:
        return JournalError(
            "The disk is full: the last entry was not written",
            where=where,
            why=f"{said}; everything acknowledged before is kept",
            mend="make room on the disk, then start the run again",
        )
    if code == sqlite3.SQLITE_NOTADB:
        return unusable(
            "The file is not a journal, or its beginning is damaged",
            where=where,
            why=said,
            mend="name the journal's own file, or go back to a copy",
        )
    if code in (sqlite3.SQLITE_READONLY, sqlite3.SQLITE_CANTOPEN, sqlite3.SQLITE_PERM):
        return JournalError(
            "The journal cannot be opened or written",
            where=where,
            why=said,
            mend="check the permissions of the file and of its folder",
        )
    if code in (sqlite3.SQLITE_BUSY, sqlite3.SQLITE_LOCKED):
        return JournalError(
            "Another program keeps the journal locked",
            where=where,
            why=f"{said} for {_BUSY_TIMEOUT_S:g} s",
            mend="close the program that has the file open",
        )
    if code == sqlite3.SQLITE_IOERR:
        return JournalError(
            "The disk did not take or give what the journal asked",
            where=where,
            why=f"{said}; everything acknowledged before is kept",
            mend="check the disk and the space on it",
        )
    return JournalDamaged(
        "The journal is damaged",
        where=where,
        why=said,
        mend="run evenarm records verify, keep the file as it is, and go back to a copy",
    )
