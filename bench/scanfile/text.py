"""Bytes of a scan file to lines, cells and numbers."""

from __future__ import annotations

import math
import re
from pathlib import Path

from bench.errors import ScanFileError

LARGEST_BYTES = 256 << 20
HOW = (
    "write a header such as 'position [um],signal [V]' and one row a reading, "
    "or name the columns with --position and --signal"
)

_COMMENT = re.compile(r"#\s*([A-Za-z_]\w*)\s*[=:]\s*(.*?)\s*$")
_NUMBER = re.compile(r"^[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?$")


def read_text(file: Path) -> str:
    where = str(file)
    try:
        if file.is_dir():
            raise ScanFileError(
                "this is a folder, not a scan file",
                where=where,
                mend="give the files in it by name",
            )
        size = file.stat().st_size
        if size > LARGEST_BYTES:
            raise ScanFileError(
                "the file is too large for one scan",
                where=where,
                why=f"{size / 2**20:.0f} MiB; at most {LARGEST_BYTES >> 20} MiB are read",
                mend="cut it to the stretch around the packet, or split it",
            )
        raw = file.read_bytes()
    except FileNotFoundError:
        raise ScanFileError(
            "there is no such file", where=where, mend="check the name and the folder"
        ) from None
    except (OSError, ValueError) as error:
        raise ScanFileError(
            "the file cannot be read",
            where=where,
            why=str(getattr(error, "strerror", None) or error),
            mend="check that it is a plain file and may be read",
        ) from None
    if not raw.strip():
        raise ScanFileError("the file is empty", where=where, why="no text in it", mend=HOW)
    if raw[:2] in (b"\xff\xfe", b"\xfe\xff"):
        return raw.decode("utf-16", errors="replace")
    head = raw[:4096]
    odd = sum(byte < 9 or 13 < byte < 32 for byte in head)
    if b"\x00" in head or odd > len(head) // 50:
        raise ScanFileError(
            "the file is not text",
            where=where,
            why="its first bytes are binary",
            mend="export the scan as CSV and give that file",
        )
    try:
        return raw.decode("utf-8-sig")
    except UnicodeDecodeError:
        return raw.decode("latin-1")


def comments_of(lines: list[str]) -> tuple[dict[str, str], int]:
    """Keys of the comment lines of the whole file, and the index of the first other line."""
    found: dict[str, str] = {}
    first = len(lines)
    for index, line in enumerate(lines):
        text = line.strip()
        if text.startswith("#"):
            match = _COMMENT.match(text)
            if match:
                found.setdefault(match[1].lower(), match[2])
        elif text:
            first = min(first, index)
    return found, first


def separator_of(header: str) -> tuple[str, bool]:
    """The character between columns ('' for runs of blanks), and whether decimal commas may be."""
    if ";" in header:
        return ";", True
    if "\t" in header:
        return "\t", True
    return (",", False) if "," in header else ("", True)


def split(line: str, separator: str) -> list[str]:
    cells = line.split(separator) if separator else re.split(r"\s+(?![\[(])", line.strip())
    return [cell.strip().strip('"').strip() for cell in cells]


def number(text: str, *, decimal_comma: bool) -> float:
    """The number, NaN where the text is none."""
    if decimal_comma and text.count(",") == 1 and "." not in text:
        text = text.replace(",", ".")
    if not _NUMBER.match(text):
        return math.nan
    return float(text)
