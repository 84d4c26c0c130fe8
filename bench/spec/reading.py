"""A TOML file into a dictionary, with a message for everything that can be wrong with a file."""

from __future__ import annotations

import hashlib
import tomllib
from pathlib import Path
from typing import Any

from bench.errors import InputError

LARGEST_BYTES = 1_000_000

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
    try:
        tables = tomllib.loads(text)
    except (ValueError, RecursionError) as error:
        reason = "tables are nested too deep" if isinstance(error, RecursionError) else str(error)
        raise InputError(
            f"{what} is not valid TOML",
            where=str(path),
            why=reason,
            mend='mend that line; quantities are written as text: speed = "1 mm/s"',
        ) from None
    if not tables:
        raise InputError(f"{what} holds no tables", where=str(path), mend=mend)
    return tables, hashlib.sha256(raw).hexdigest()
