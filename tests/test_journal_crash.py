"""Killed writers, second writers, full disks: what was acknowledged is there, and nothing else."""

from __future__ import annotations

import os
import random
import signal
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from sqlalchemy import event

from bench.errors import JournalError, JournalHeld
from bench.journal import open_journal, verify

WRITER = """
import os, sys
import numpy as np
from bench.journal import open_journal
with open_journal(sys.argv[1], write=True, who="writer under test") as journal:
    for number in range(100000):
        if number % 4:
            entry = journal.append("note", {"n": number, "text": "x" * 300}, run="r")
        else:
            entry = journal.append_readings("r", sys.argv[2], {"n": np.arange(500.0) + number})
        os.write(1, f"{entry.seq} {entry.sha256}\\n".encode())
"""
PROJECT = Path(__file__).resolve().parent.parent


def start_writer(path: Path, scan: str) -> subprocess.Popen[bytes]:
    folders = os.pathsep.join([str(PROJECT), os.environ.get("PYTHONPATH", "")])
    return subprocess.Popen(
        [sys.executable, "-c", WRITER, str(path), scan],
        stdout=subprocess.PIPE,
        env={**os.environ, "PYTHONPATH": folders},
    )


def kill_writers(path: Path, times: int, seed: int) -> int:
    """Kill a writer ``times`` times; how many acknowledged entries there were, all found again."""
    chance = random.Random(seed)
    acknowledged: dict[int, str] = {}
    for number in range(times):
        with start_writer(path, f"scan-{number}") as writer:
            assert writer.stdout is not None
            lines = [writer.stdout.readline() for _ in range(chance.randint(1, 120))]
            # Where in the next write the signal arrives is the scheduler's choice.
            writer.send_signal(signal.SIGKILL)
            lines += writer.stdout.read().splitlines(keepends=True)
        for line in lines:
            if line.endswith(b"\n"):
                seq, sha256 = line.split()
                assert int(seq) not in acknowledged
                acknowledged[int(seq)] = sha256.decode()
        result = verify(path)
        assert result.problems == ()
        with open_journal(path, write=False) as journal:
            kept = {entry.seq: entry.sha256 for entry in journal.entries()}
            assert {seq: kept.get(seq) for seq in acknowledged} == acknowledged
            assert len(kept) - max(acknowledged) in (0, 1)  # written, and killed before saying so
    return len(acknowledged)


def test_a_killed_writer_loses_nothing_acknowledged(tmp_path: Path) -> None:
    assert kill_writers(tmp_path / "logs" / "journal.sqlite3", times=10, seed=7) > 100


def test_what_a_writer_promises_is_what_it_asked_the_database_for(tmp_path: Path) -> None:
    with open_journal(tmp_path / "journal.sqlite3", write=True) as journal:
        store = journal._store
        assert store.pragma("journal_mode") == "wal"
        assert store.pragma("synchronous") == 2  # FULL: the log is on the disk at each commit
        assert store.pragma("foreign_keys") == 1
        assert store.pragma("busy_timeout") == 5000


def test_a_second_writer_is_refused_and_told_who_holds_it(tmp_path: Path) -> None:
    path = tmp_path / "journal.sqlite3"
    with start_writer(path, "s") as writer:
        assert writer.stdout is not None
        writer.stdout.readline()
        with pytest.raises(JournalHeld) as caught:
            open_journal(path, write=True)
        for said in (
            "writer under test",
            f"process {writer.pid} ",
            os.uname().nodename,
            "since 20",
        ):
            assert said in caught.value.why
        with open_journal(path, write=False) as reader:
            assert reader.head.entries >= 1
        assert verify(path).intact
        writer.kill()
    with open_journal(path, write=True) as journal:
        journal.append("note", {})


def test_a_second_writer_in_the_same_process_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "journal.sqlite3"
    link = tmp_path / "link"
    with open_journal(path, write=True, who="first\x1b[2J") as journal:
        link.symlink_to(path)
        for name in (path, link, f"sqlite:///{path}"):
            with pytest.raises(JournalHeld, match=f"process {os.getpid()}") as caught:
                open_journal(name, write=True)
            assert "\x1b" not in str(caught.value)
        journal.append("note", {})
    path.with_name("journal.sqlite3-writer").write_bytes(b"\xff{")
    open_journal(path, write=True).close()


def test_a_full_disk_loses_nothing_acknowledged(tmp_path: Path) -> None:
    path = tmp_path / "journal.sqlite3"
    with open_journal(path, write=True) as journal:
        connection = journal._store._connection
        pages = connection.exec_driver_sql("PRAGMA page_count").scalar_one() + 30
        connection.exec_driver_sql(f"PRAGMA max_page_count={pages}")
        connection.rollback()
        acknowledged = 0
        refused = None
        while refused is None:
            try:
                journal.append_readings("r", "s", {"x": np.arange(900.0) + acknowledged})
                acknowledged += 1
            except JournalError as error:
                refused = error
        assert acknowledged > 5
        assert "disk is full" in refused.what
        assert "make room" in refused.mend
        assert journal.head.entries == acknowledged
        assert len(journal.readings("r", "s")["x"]) == 900 * acknowledged
        connection.exec_driver_sql(f"PRAGMA max_page_count={pages + 100}")
        connection.rollback()
        entry = journal.append_readings("r", "s", {"x": np.ones(900)})
        assert (entry.seq, entry.body["sequence"]) == (acknowledged + 1, acknowledged)
    result = verify(path)
    assert (result.entries, result.problems) == (acknowledged + 1, ())


FILLER = """
import resource, signal, sys
import numpy as np
from bench.errors import JournalError
from bench.journal import open_journal
with open_journal(sys.argv[1], write=True) as journal:
    signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
    resource.setrlimit(resource.RLIMIT_FSIZE, (300_000, 300_000))
    try:
        while True:
            entry = journal.append_readings("r", "s", {"x": np.arange(100.0)})
            print(entry.seq, flush=True)
    except JournalError as error:
        print(error.what)
"""


def test_a_disk_that_takes_no_more_bytes(tmp_path: Path) -> None:
    path = tmp_path / "journal.sqlite3"
    folders = os.pathsep.join([str(PROJECT), os.environ.get("PYTHONPATH", "")])
    done = subprocess.run(
        [sys.executable, "-W", "error", "-c", FILLER, str(path)],
        capture_output=True,
        text=True,
        check=True,
        env={**os.environ, "PYTHONPATH": folders},
    )
    *acknowledged, said = done.stdout.splitlines()
    assert said.startswith(("The disk did not take", "The disk is full"))
    assert done.stderr == ""
    result = verify(path)
    assert (result.entries, result.problems) == (len(acknowledged), ())
    assert len(acknowledged) > 10


def test_a_commit_that_fails_acknowledges_nothing(tmp_path: Path) -> None:
    path = tmp_path / "journal.sqlite3"
    with open_journal(path, write=True) as journal:
        journal.append("note", {"n": 1})
        engine = journal._store._connection.engine

        def fail(connection: object) -> None:
            raise OSError("the plug was pulled")

        event.listen(engine, "commit", fail)
        with pytest.raises(OSError, match="plug"):
            journal.append_readings("r", "s", {"x": np.ones(3)})
        event.remove(engine, "commit", fail)
        assert journal.head.entries == 1
        assert journal.append("note", {"n": 2}).seq == 2
    assert verify(path).problems == ()


def test_a_journal_that_was_moved_away_acknowledges_nothing(tmp_path: Path) -> None:
    path = tmp_path / "journal.sqlite3"
    with open_journal(path, write=True) as journal:
        journal.append("note", {})
        path.rename(tmp_path / "elsewhere")
        with pytest.raises(JournalError, match="moved, removed or replaced"):
            journal.append("note", {})
        (tmp_path / "elsewhere").rename(path)
        journal.append("note", {})
    assert verify(path).entries == 2


@pytest.mark.skipif(os.geteuid() == 0, reason="root may write everywhere")
def test_a_folder_without_permission(tmp_path: Path) -> None:
    path = tmp_path / "kept" / "journal.sqlite3"
    with open_journal(path, write=True) as journal:
        journal.append("note", {})
    path.chmod(0o400)
    with pytest.raises(JournalError, match="opened or written"):
        open_journal(path, write=True)
    path.with_name("journal.sqlite3-writer").unlink()
    path.parent.chmod(0o500)
    try:
        assert verify(path).entries == 1
        with pytest.raises(JournalError, match=r"locked for writing|opened or written"):
            open_journal(path, write=True)
        with pytest.raises(JournalError, match="cannot be created"):
            open_journal(path.parent / "more" / "journal.sqlite3", write=True)
    finally:
        path.parent.chmod(0o700)


def test_a_folder_that_cannot_be_made(tmp_path: Path) -> None:
    with pytest.raises(JournalError, match="cannot be created") as caught:
        open_journal("/proc/evenarm/journal.sqlite3", write=True)
    assert "writable" in caught.value.mend
    assert caught.value.exit_status == 3
