"""Whatever is done to the file of a journal is noticed, or changes nothing that anybody reads."""

from __future__ import annotations

import hashlib
import random
import sqlite3
import tempfile
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from bench.errors import JournalDamaged, JournalError, UsageError
from bench.journal import finite, measurements, open_journal, runs, verify
from bench.journal.canonical import block_name, encode_block

RUN = "20261201-0930-aaaa"


def fill(path: Path) -> None:
    """Twelve entries of every kind that commands read, three of them readings."""
    with open_journal(path, write=True) as journal:
        journal.append("run-started", {"procedure": "path-equalisation"}, run=RUN, bench_time_s=0.0)
        for part in range(3):
            journal.append("move-done", {"position_m": 0.01 + part}, run=RUN, bench_time_s=part)
            journal.append_readings(RUN, "s", {"time_s": np.arange(5.0) + part, "v": np.ones(5)})
        body = {"id": "m-1", "name": "zero", "value": 13218.4012, "unit": "um", "dof": None}
        journal.append("measurement", finite(body), run=RUN)
        journal.append("run-ended", {"outcome": "accepted", "reason": ""}, run=RUN)
        journal.append("note", {"text": "later"})
        journal.append("run-started", {"procedure": "other"}, run="20261201-1000-bbbb")
        journal.append("note", {"text": "latest"}, bench_time_s=1.5)


def everything_read(path: Path) -> Any:
    """All that any command or screen reads of a journal."""
    with open_journal(path, write=False) as journal:
        found = runs(journal)
        return (
            journal.head,
            list(journal.entries()),
            found,
            measurements(journal),
            [list(journal.entries(run=run.run)) for run in found],
            [list(journal.entries(RUN, kinds=(kind,))) for kind in ("readings", "move-done")],
            [list(journal.entries(kinds=(kind,))) for kind in ("note", "run-started")],
            {name: column.tobytes() for name, column in journal.readings(RUN, "s").items()},
        )


def copy(whole: bytes, path: Path) -> None:
    for suffix in ("-wal", "-shm", "-writer"):
        path.with_name(path.name + suffix).unlink(missing_ok=True)
    path.write_bytes(whole)


@contextmanager
def unguarded(path: Path) -> Iterator[sqlite3.Connection]:
    """The file in the hands of somebody who takes the guards down and puts them back after."""
    database = sqlite3.connect(path, isolation_level=None)
    guards = database.execute("SELECT name, sql FROM sqlite_master WHERE type = 'trigger'")
    guards = guards.fetchall()
    for name, _ in guards:
        database.execute(f"DROP TRIGGER {name}")
    try:
        yield database
    finally:
        for _, text in guards:
            database.execute(text)
        database.close()


@pytest.fixture(scope="module")
def whole(tmp_path_factory: pytest.TempPathFactory) -> bytes:
    path = tmp_path_factory.mktemp("whole") / "journal.sqlite3"
    fill(path)
    return path.read_bytes()


# --- bytes ---------------------------------------------------------------------------------------


def changed_bytes_are_noticed(whole: bytes, path: Path, offsets: list[int], seed: int) -> None:
    """At each offset one changed byte; tests and the exhaustive command use it."""
    copy(whole, path)
    sound = everything_read(path)
    chance = random.Random(seed)
    missed = []
    for offset in offsets:
        changed = bytearray(whole)
        changed[offset] ^= chance.choice((1, 2, 4, 8, 16, 32, 64, 128, 255, 85))
        copy(bytes(changed), path)
        try:
            noticed = not verify(path).intact
        except JournalError:
            noticed = True
        try:
            same = everything_read(path) == sound
        except JournalError:
            same = False
        with suppress(JournalError), open_journal(path, write=True) as journal:
            journal.append("note", {"text": "after"})
        if not noticed and not same:
            missed.append(offset)
    assert missed == []


def test_a_changed_byte_is_noticed_or_changes_nothing(whole: bytes, tmp_path: Path) -> None:
    chance = random.Random(20261201)
    written = [offset for offset, byte in enumerate(whole) if byte]
    offsets = [
        *range(0, 100, 7),
        *chance.sample(written, 110),
        *chance.sample(range(len(whole)), 30),
    ]
    changed_bytes_are_noticed(whole, tmp_path / "journal.sqlite3", offsets, seed=1)


@pytest.mark.parametrize("kept", [0.0, 0.003, 0.1, 0.5, 0.9, 0.9999])
def test_a_file_cut_anywhere_is_noticed(whole: bytes, tmp_path: Path, kept: float) -> None:
    path = tmp_path / "journal.sqlite3"
    copy(whole[: int(len(whole) * kept)], path)
    with suppress(JournalError):
        assert not verify(path).intact


@pytest.mark.parametrize("filler", [b"\0", b"\xff", b"SQLite format 3\0"])
def test_overwritten_pages_are_noticed(whole: bytes, tmp_path: Path, filler: bytes) -> None:
    path = tmp_path / "journal.sqlite3"
    page = (filler * 4096)[:4096]
    for start in range(0, len(whole), 4096):
        copy(whole[:start] + page + whole[start + 4096 :], path)
        with suppress(JournalError):
            assert not verify(path).intact


# --- rows ----------------------------------------------------------------------------------------

COLUMNS = ("time_utc", "bench_time_s", "kind", "run", "body", "prev", "sha256")
VALUES = st.one_of(
    st.none(),
    st.integers(-(2**63), 2**63 - 1),
    st.floats(allow_nan=False),
    st.binary(max_size=12),
    st.text(alphabet=st.characters(codec="utf-8"), max_size=12),
    st.sampled_from(["{}", "0.0", "null", "note", RUN, "0" * 64, '{"a": 1}', '{"a":1,"a":2}']),
)


@settings(max_examples=40, deadline=None)
@given(st.integers(1, 12), st.sampled_from(COLUMNS), VALUES)
def test_any_changed_value_is_noticed(seq: int, column: str, value: Any) -> None:
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "journal.sqlite3"
        fill(path)
        with unguarded(path) as database:
            before = database.execute(f"SELECT {column} FROM entries WHERE seq = ?", (seq,))
            before = before.fetchone()[0]
            try:
                database.execute(f"UPDATE entries SET {column} = ? WHERE seq = ?", (value, seq))
            except sqlite3.IntegrityError:
                return
            after = database.execute(f"SELECT {column} FROM entries WHERE seq = ?", (seq,))
            after = after.fetchone()[0]
        result = verify(path)
        if type(after) is type(before) and after == before:
            assert result.intact
        else:
            assert not result.intact
            assert any(f"entry {seq}:" in problem for problem in result.problems)


CHANGES: dict[str, tuple[str, str]] = {
    "an entry removed": ("DELETE FROM entries WHERE seq = 4", "entry 5 comes where entry 4"),
    "entries swapped": (
        "UPDATE entries SET seq = -seq; UPDATE entries SET seq = CASE -seq WHEN 2 THEN 3"
        " WHEN 3 THEN 2 ELSE -seq END",
        "entry 2",
    ),
    "numbers moved on": ("UPDATE entries SET seq = seq + 100", "entry 101 comes where entry 1"),
    "a block removed": (
        "DELETE FROM blocks WHERE entry = 3",
        "entry 3: its readings are missing",
    ),
    "a block changed": (
        "UPDATE blocks SET bytes = replace(bytes, 'time_s', 'time_x') WHERE entry = 5",
        "entry 5: its readings do not agree",
    ),
    "a reading changed": (
        "UPDATE blocks SET bytes = substr(bytes, 1, length(bytes) - 1) || x'41' WHERE entry = 5",
        "entry 5: its readings do not agree",
    ),
    "a block under another name": (
        "UPDATE blocks SET name = 'abc' WHERE entry = 5",
        "the block at entry 5 is named by no entry",
    ),
    "a block nobody names": (
        "INSERT INTO blocks VALUES (1, 'abc', x'00')",
        "the block at entry 1 is named by no entry",
    ),
    "a block of no entry": (
        "INSERT INTO blocks VALUES (99, 'abc', x'00')",
        "block 99 belongs to no entry",
    ),
    "another description": (
        "UPDATE journal_schema SET about = 'nothing'",
        "the description of the schema",
    ),
    "a guard of somebody else": (
        "CREATE TRIGGER t AFTER INSERT ON entries BEGIN SELECT 1; END",
        "t was added to entries",
    ),
    "an index gone": ("DROP INDEX entries_by_run", "entries_by_run is missing"),
}


@pytest.mark.parametrize("name", CHANGES)
def test_what_is_done_to_rows_is_said(whole: bytes, tmp_path: Path, name: str) -> None:
    path = tmp_path / "journal.sqlite3"
    copy(whole, path)
    statements, said = CHANGES[name]
    with unguarded(path) as database:
        for statement in statements.split("; U"):
            text = statement if statement.startswith(("U", "D", "I", "C")) else "U" + statement
            database.execute(text)
    result = verify(path)
    assert not result.intact
    assert any(said in problem for problem in result.problems), result.problems


def test_guards_refuse_every_change(whole: bytes, tmp_path: Path) -> None:
    path = tmp_path / "journal.sqlite3"
    copy(whole, path)
    database = sqlite3.connect(path, isolation_level=None)
    columns = "seq, time_utc, kind, body, prev, sha256"
    for statement in (
        "UPDATE entries SET body = '{}' WHERE seq = 1",
        "DELETE FROM entries",
        "DELETE FROM entries WHERE seq = 12",
        "UPDATE blocks SET bytes = x''",
        "DELETE FROM blocks",
        "UPDATE journal_schema SET version = 0",
        "DELETE FROM journal_schema",
        "INSERT INTO journal_schema VALUES (1, 'x')",
        "REPLACE INTO journal_schema VALUES (1, 'x')",
        "REPLACE INTO blocks SELECT entry, name, x'00' FROM blocks",
        f"REPLACE INTO entries ({columns}) SELECT {columns} FROM entries WHERE seq = 12",
        f"INSERT INTO entries ({columns}) SELECT NULL, time_utc, kind, body, prev, sha256"
        " FROM entries WHERE seq = 12",
        f"INSERT INTO entries ({columns}) SELECT 14, time_utc, kind, body, sha256, sha256"
        " FROM entries WHERE seq = 12",
        f"INSERT INTO entries ({columns}) SELECT 13, time_utc, kind, body, prev, sha256"
        " FROM entries WHERE seq = 12",
    ):
        with pytest.raises(sqlite3.IntegrityError, match=r"append-only|follows the last"):
            database.execute(statement)
    database.close()
    assert verify(path).intact


def test_a_missing_guard_is_noticed(whole: bytes, tmp_path: Path) -> None:
    path = tmp_path / "journal.sqlite3"
    copy(whole, path)
    database = sqlite3.connect(path)
    database.execute("DROP TRIGGER entries_no_update")
    database.close()
    assert verify(path).problems == ("the file: entries_no_update is missing",)


def test_a_weakened_guard_is_noticed(whole: bytes, tmp_path: Path) -> None:
    path = tmp_path / "journal.sqlite3"
    copy(whole, path)
    database = sqlite3.connect(path)
    database.execute("DROP TRIGGER entries_no_update")
    database.execute(
        "CREATE TRIGGER entries_no_update BEFORE UPDATE ON entries WHEN 0 BEGIN SELECT 1; END"
    )
    database.close()
    assert verify(path).problems == ("the file: the definition of entries_no_update was changed",)


def test_readings_are_not_trusted_to_a_block_that_is_not_theirs(tmp_path: Path) -> None:
    path = tmp_path / "journal.sqlite3"
    columns = {"x": np.arange(4.0)}
    with open_journal(path, write=True) as journal:
        journal.append("note", {})
        database = sqlite3.connect(path)
        name = block_name(encode_block(columns))
        database.execute("INSERT INTO blocks VALUES (1, ?, x'00')", (name,))
        database.commit()
        database.close()
        with pytest.raises(JournalDamaged) as caught:
            journal.append_readings("r", "s", columns)
        assert name[:16] in caught.value.why
        assert journal.head.entries == 1


# --- what only a noted head can tell -------------------------------------------------------------


def cut_tail(database: sqlite3.Connection) -> None:
    database.execute("DELETE FROM entries WHERE seq > 9")


def rewrite(database: sqlite3.Connection, upto: int = 12) -> None:
    """Change entry 10 and forge the hashes after it."""
    database.execute('UPDATE entries SET body = \'{"text":"forged"}\' WHERE seq = 10')
    for seq in range(10, upto + 1):
        row = database.execute(
            "SELECT prev, seq, time_utc, bench_time_s, kind, run, body FROM entries WHERE seq = ?",
            (seq,),
        ).fetchone()
        lines = ["evenarm.entry/1", *("" if cell is None else str(cell) for cell in row)]
        forged = hashlib.sha256("\n".join(lines).encode()).hexdigest()
        database.execute("UPDATE entries SET sha256 = ? WHERE seq = ?", (forged, seq))
        if seq < upto:
            database.execute("UPDATE entries SET prev = ? WHERE seq = ?", (forged, seq + 1))


def test_one_forged_entry_is_found_by_the_next(whole: bytes, tmp_path: Path) -> None:
    path = tmp_path / "journal.sqlite3"
    copy(whole, path)
    with unguarded(path) as database:
        rewrite(database, upto=10)
    assert verify(path).problems == ("entry 11: it does not name the entry before it",)
    with pytest.raises(JournalDamaged) as caught:
        open_journal(path, write=True)
    assert "entry 11" in caught.value.why


@pytest.mark.parametrize("change", [cut_tail, rewrite])
def test_a_noted_head_tells_of_a_cut_or_rewritten_end(
    whole: bytes, tmp_path: Path, change: Callable[[sqlite3.Connection], None]
) -> None:
    path = tmp_path / "journal.sqlite3"
    copy(whole, path)
    noted = verify(path).head
    with open_journal(path, write=False) as journal:
        earlier = [entry.sha256 for entry in journal.entries()][8]
    assert verify(path, noted_heads=(noted, noted[:16].upper(), earlier)).intact
    with unguarded(path) as database:
        change(database)
    assert verify(path).intact
    assert verify(path, noted_heads=(earlier,)).intact
    result = verify(path, noted_heads=(noted[:16],))
    assert result.problems == (
        f"the noted head {noted[:16]} is not in this journal: entries were cut or rewritten",
    )
    for short in ("abc", "fbd2", "g" * 16, "0" * 65):
        with pytest.raises(UsageError, match="cannot be a head") as caught:
            verify(path, noted_heads=(short,))
        assert "at least 16 hex digits" in caught.value.why


# --- writing to what is damaged ------------------------------------------------------------------


@pytest.mark.parametrize(
    "statement",
    [
        "UPDATE entries SET body = '{}' WHERE seq = 12",
        "UPDATE entries SET kind = 'noted' WHERE seq = 3",
        "DELETE FROM entries WHERE seq = 6",
        "DELETE FROM blocks WHERE entry = 5",
        "UPDATE entries SET sha256 = x'00' WHERE seq = 12",
    ],
)
def test_a_damaged_journal_takes_no_entry_and_is_left_alone(
    whole: bytes, tmp_path: Path, statement: str
) -> None:
    path = tmp_path / "journal.sqlite3"
    copy(whole, path)
    with unguarded(path) as database:
        database.execute(statement)
    before = path.read_bytes()
    with pytest.raises(JournalDamaged) as caught:
        open_journal(path, write=True)
    assert "entry" in caught.value.why
    assert caught.value.exit_status == 1
    assert path.read_bytes() == before


def test_a_writer_that_went_around_the_lock_is_noticed(whole: bytes, tmp_path: Path) -> None:
    path = tmp_path / "journal.sqlite3"
    copy(whole, path)
    with open_journal(path, write=True) as journal:
        with unguarded(path) as database:
            database.execute("DELETE FROM entries WHERE seq = 12")
        with pytest.raises(JournalDamaged, match="damaged") as caught:
            journal.append("note", {})
        assert "something else wrote" in caught.value.why


def test_verification_writes_nothing(whole: bytes, tmp_path: Path) -> None:
    path = tmp_path / "journal.sqlite3"
    copy(whole, path)
    assert verify(path).intact
    assert everything_read(path)
    assert path.read_bytes() == whole
    log = path.with_name("journal.sqlite3-wal")
    assert not log.exists() or log.stat().st_size == 0
    assert not path.with_name("journal.sqlite3-writer").exists()
