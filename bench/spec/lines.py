"""Where in a TOML file a key stands, for messages; the parser keeps no lines."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence

__all__ = ["line_of"]

_HEADER = re.compile(r"\s*\[\s*(\[?)\s*([A-Za-z0-9_.-]+)\s*\]\]?\s*(?:#.*)?$")
_KEY = re.compile(r"\s*([\"']?)([A-Za-z0-9_-]+(?:\s*\.\s*[A-Za-z0-9_-]+)*)\1\s*=")


def line_of(text: str, path: str, rows: Mapping[str, Sequence[str]]) -> int | None:
    """The line, from 1, of the key at ``path``, else of the table that lacks it, else None.

    ``rows`` gives, for the name of an array of tables, what messages call each of them. A file
    with text over several lines has none of its keys found, as keys cannot be told from text.
    """
    if '"""' in text or "'''" in text:
        return None
    found: dict[str, int] = {}
    table, counts = "", dict.fromkeys(rows, 0)
    for number, line in enumerate(text.splitlines(), 1):
        header, key = _HEADER.match(line), _KEY.match(line)
        if header is not None:
            table = header[2]
            if header[1] and table in rows and counts[table] < len(rows[table]):
                counts[table] += 1
                table = rows[table][counts[table] - 1]
            found.setdefault(table, number)
        elif key is not None:
            name = re.sub(r"\s", "", key[2])
            found.setdefault(f"{table}.{name}" if table else name, number)
    wanted = path
    while wanted and wanted not in found:
        shorter = max(wanted.rfind("."), wanted.rfind("["))
        wanted = wanted[:shorter] if shorter > 0 else ""
    return found.get(wanted)
