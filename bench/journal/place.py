"""Where a journal lives and who holds it: URLs to files, durable folders, the writer's lock."""

from __future__ import annotations

import contextlib
import fcntl
import json
import os
import socket
from dataclasses import dataclass
from pathlib import Path

from bench.errors import JournalError, JournalHeld

_SCHEMES = ("sqlite", "sqlite+pysqlite")


def unusable(what: str, *, where: str = "", why: str = "", mend: str = "") -> JournalError:
    """A JournalError about what a person named: exit status 2, as for any bad input."""
    error = JournalError(what, where=where, why=why, mend=mend)
    error.exit_status = 2
    return error


def journal_path(url: str | os.PathLike[str]) -> Path:
    """The file that ``sqlite:///file`` or a plain path names, absolute, links followed.

    Everything after the third slash is the file's name, as it is. Raises JournalError.
    """
    text = os.fspath(url)
    if "://" in text:
        scheme, _, rest = text.partition("://")
        if scheme not in _SCHEMES:
            # What follows may hold a password, so it is not repeated.
            raise unusable(
                "This kind of journal is not supported",
                where=f"{scheme}://...",
                why="journals are SQLite files in this version",
                mend='write url = "sqlite:///logs/journal.sqlite3" in [records] of bench.toml',
            )
        if not rest.startswith("/"):
            raise unusable(
                "The address of the journal names no file",
                where=text,
                why="three slashes come before the file's name, four before an absolute one",
                mend='write url = "sqlite:///logs/journal.sqlite3" in [records] of bench.toml',
            )
        text = rest[1:]
    if text in ("", ":memory:") or "\0" in text:
        raise unusable(
            "The address of the journal names no file",
            where=os.fspath(url),
            why="a journal must outlive the program",
            mend='write url = "sqlite:///logs/journal.sqlite3" in [records] of bench.toml',
        )
    try:
        return Path(text).resolve()
    except (OSError, RuntimeError) as error:
        raise unusable(
            "The journal cannot be reached", where=text, why=str(error), mend="check the path"
        ) from error


def refuse_unless_file(path: Path, *, must_exist: bool) -> None:
    """Raise JournalError where ``path`` is something else than a file that could be a journal."""
    try:
        if path.is_dir():
            raise unusable(
                "The journal is a folder, not a file",
                where=str(path),
                mend="name the file in it, such as journal.sqlite3",
            )
        exists = path.exists()
        if exists and not path.is_file():
            raise unusable(
                "The journal is not a regular file", where=str(path), mend="name a regular file"
            )
    except OSError as error:
        raise unusable(
            "The journal cannot be reached", where=str(path), why=str(error), mend="check the path"
        ) from error
    if must_exist and not exists:
        raise unusable(
            "There is no journal yet",
            where=str(path),
            why="no such file",
            mend="a run writes it; or name another with --bench or --journal",
        )


def sync_folder(folder: Path) -> None:
    """Make names in ``folder`` durable. Raises OSError."""
    descriptor = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def make_durably(path: Path) -> bool:
    """Create the file at ``path`` and its folders; true where it was not there.

    Raises JournalError.

    An existing file is not opened: closing it would drop locks that SQLite holds in this process.
    """
    try:
        missing = [folder for folder in (path.parent, *path.parent.parents) if not folder.exists()]
        for folder in reversed(missing):
            folder.mkdir(exist_ok=True)
            sync_folder(folder.parent)
        try:
            descriptor = os.open(path, os.O_CREAT | os.O_EXCL | os.O_WRONLY | os.O_CLOEXEC, 0o644)
        except FileExistsError:
            return False
        try:
            os.fsync(descriptor)
        finally:
            os.close(descriptor)
        sync_folder(path.parent)
    except OSError as error:
        raise JournalError(
            "The journal cannot be created",
            where=str(path),
            why=error.strerror or str(error),
            mend="make the folder writable, or choose another in [records] of bench.toml",
        ) from error
    return True


@dataclass(frozen=True)
class Hold:
    """The writer's lock; it goes with the process that has it, however that ends."""

    path: Path
    descriptor: int

    def release(self) -> None:
        with contextlib.suppress(OSError):
            os.ftruncate(self.descriptor, 0)
        os.close(self.descriptor)


def take_hold(journal: Path, *, who: str, since_utc: str) -> Hold:
    """Become the only writer of ``journal``. Raises JournalHeld, JournalError.

    flock and not lockf: the lock belongs to this open file, so a second attempt in the same process
    is refused too and cannot drop the first one's lock by closing.
    """
    path = journal.with_name(journal.name + "-writer")
    try:
        descriptor = os.open(path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o644)
    except OSError as error:
        raise JournalError(
            "The journal cannot be locked for writing",
            where=str(path),
            why=error.strerror or str(error),
            mend="make the folder writable, or choose another in [records] of bench.toml",
        ) from error
    try:
        fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
        holder = {"who": who, "pid": os.getpid(), "host": socket.gethostname(), "since": since_utc}
        os.ftruncate(descriptor, 0)
        os.pwrite(descriptor, json.dumps(holder).encode(), 0)
    except BlockingIOError as error:
        said = _holder(descriptor)
        os.close(descriptor)
        raise JournalHeld(
            "Another process writes to this journal",
            where=str(journal),
            why=f"held by {said}",
            mend="end that run first; reading works meanwhile (evenarm records list)",
        ) from error
    except OSError as error:
        os.close(descriptor)
        raise JournalError(
            "The journal cannot be locked for writing",
            where=str(path),
            why=error.strerror or str(error),
            mend="keep the journal on a local disk with space left",
        ) from error
    return Hold(path, descriptor)


def _holder(descriptor: int) -> str:
    try:
        said = json.loads(os.pread(descriptor, 4096, 0).decode("utf-8", "replace"))
        return f"{said['who']}, process {said['pid']} on {said['host']}, since {said['since']}"
    except (OSError, ValueError, TypeError, KeyError):
        return "a process that has not said its name"
