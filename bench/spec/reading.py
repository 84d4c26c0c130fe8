"""A TOML file into a dictionary, with a message for everything that can be wrong with a file."""

from __future__ import annotations

import hashlib
import re
import tomllib
from pathlib import Path
from typing import Any

from bench.errors import InputError

LARGEST_BYTES = 1_000_000
DEEPEST = 50  # brackets or tables inside each other; a bench needs five

# What hides brackets (text and comments), then the brackets themselves.
_LONG = r'"{3}(?:\\[\s\S]|[^\\])*?(?:"{3}|\Z)' + r"|'{3}[\s\S]*?(?:'{3}|\Z)"
_SHORT = r'"(?:\\.|[^"\\\n])*"?' + r"|'[^'\n]*'?|#[^\n]*"
_BRACKETS = re.compile(rf"{_LONG}|{_SHORT}|[\[{{\]}}]")

__all__ = ["LARGEST_BYTES", "read_bytes", "read_toml"]


def read_bytes(path: Path, what: str, mend: str, largest: int = LARGEST_BYTES) -> bytes:
    """The bytes of a regular file of bounded size. Raises InputError."""
    where = str(path)
    try:
        if path.is_dir():
            raise InputError(f"{what} is a folder, not a file", where=where, mend=mend)
        if not path.exists():
            raise InputError(f"{what} is not there", where=where, mend=mend)
        if not path.is_file():
            raise InputError(f"{what} is not a regular file", where=where, mend=mend)
        size = path.stat().st_size
        if size > largest:
            raise InputError(
                f"{what} is too large",
                where=where,
                why=f"{size} bytes, at most {largest} are read",
                mend=mend,
            )
        return path.read_bytes()
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise InputError(f"{what} cannot be read", where=where, why=reason, mend=mend) from None


def read_text(path: Path, what: str, mend: str, largest: int = LARGEST_BYTES) -> tuple[str, bytes]:
    """The text of a UTF-8 file and its bytes. Raises InputError."""
    raw = read_bytes(path, what, mend, largest)
    where = str(path)
    if not raw.strip():
        raise InputError(f"{what} is empty", where=where, mend=mend)
    if b"\0" in raw:
        raise InputError(f"{what} is not a text file", where=where, why="it holds zero bytes")
    try:
        return raw.decode("utf-8-sig"), raw
    except UnicodeDecodeError as error:
        line = raw[: error.start].count(b"\n") + 1
        raise InputError(
            f"{what} is not UTF-8 text",
            where=f"{where}, line {line}",
            why=f"byte 0x{raw[error.start]:02x} cannot be read",
            mend="save the file again as UTF-8",
        ) from None


def read_toml(path: Path, what: str, mend: str) -> tuple[dict[str, Any], str]:
    """The tables of a TOML file, and the SHA-256 of its bytes. Raises InputError."""
    text, raw = read_text(path, what, mend)
    line = _too_deep_at(text)
    tables: dict[str, Any] = {}
    if not line:
        try:
            tables = tomllib.loads(text)
        except ValueError as error:
            raise InputError(
                f"{what} is not valid TOML",
                where=str(path),
                why=str(error),
                mend='mend that line; quantities are written as text: speed = "1 mm/s"',
            ) from None
        except RecursionError:
            line = 1
    if line or _deep(tables):
        raise InputError(
            f"{what} is nested too deep",
            where=f"{path}, line {line}" if line > 1 else str(path),
            why=f"more than {DEEPEST} brackets or tables stand inside each other",
            mend="close the brackets; " + mend,
        )
    if not tables:
        raise InputError(f"{what} holds no tables", where=str(path), mend=mend)
    return tables, hashlib.sha256(raw).hexdigest()


def _too_deep_at(text: str) -> int:
    """The line where brackets stand deeper than allowed, or 0.

    Counted before parsing: how deep a parser gets depends on its version and on who calls it.
    """
    depth = 0
    for match in _BRACKETS.finditer(text):
        if match[0] in "[{":
            depth += 1
            if depth > DEEPEST:
                return text.count("\n", 0, match.start()) + 1
        elif match[0] in "]}":
            depth = max(0, depth - 1)
    return 0


def _deep(tables: dict[str, Any]) -> bool:
    """Whether tables stand deeper than allowed, as dotted keys can make them without brackets."""
    level: list[Any] = [tables]
    for _ in range(DEEPEST + 1):
        inner: list[Any] = []
        for item in level:
            inner += item.values() if isinstance(item, dict) else item
        level = [item for item in inner if isinstance(item, dict | list)]
    return bool(level)
