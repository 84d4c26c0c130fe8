"""From a row of the file to an Entry, believing nothing that the hash does not say."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

from bench.errors import JournalDamaged
from bench.journal.canonical import entry_hash
from bench.journal.model import Entry


def checked_entry(row: tuple[Any, ...], path: Path) -> Entry:
    """A row of ``entries``, in the order of its columns, as an Entry. Raises JournalDamaged."""
    seq, time_utc, bench_time_s, kind, run, body, prev, sha256 = row
    texts = (time_utc, kind, body, prev, sha256)
    optional = (bench_time_s, run)
    if not all(isinstance(text, str) for text in texts) or not all(
        text is None or isinstance(text, str) for text in optional
    ):
        raise damaged(path, f"entry {seq}: a column holds what is not text")
    content = {
        "prev": prev,
        "seq": seq,
        "time_utc": time_utc,
        "bench_time_s": bench_time_s,
        "kind": kind,
        "run": run,
        "body": body,
    }
    if entry_hash(**content) != sha256:
        raise damaged(path, f"entry {seq}: its content does not agree with its hash")
    try:
        parsed = json.loads(body)
        bench_s = None if bench_time_s is None else float(json.loads(bench_time_s))
    except (ValueError, TypeError, RecursionError) as error:
        raise damaged(path, f"entry {seq}: its content cannot be read") from error
    if not isinstance(parsed, dict):
        raise damaged(path, f"entry {seq}: its body is not a JSON object")
    return Entry(seq, time_utc, kind, run, parsed, prev, sha256, bench_s)


def damaged(path: Path, why: str) -> JournalDamaged:
    """The error that says where a journal does not agree with itself."""
    return JournalDamaged(
        "The journal is damaged",
        where=str(path),
        why=why,
        mend="run evenarm records verify, keep the file as it is, and go back to a copy",
    )
