"""The form in which entries are hashed and readings are stored; enough to check a journal by hand.

A journal is one SQLite 3 file. Table ``entries`` holds one row an entry:

    seq           integer, 1, 2, 3 ... without gaps
    time_utc      text, 2026-12-01T09:30:00.000000Z, six decimals, UTC
    bench_time_s  text: a number as in JSON, or null where no bench clock ran
    kind          text, lower-case letters, digits and hyphens
    run           text, or null for what belongs to no run
    body          text: a JSON object, keys sorted by code point, no blanks, ASCII only (anything
                  else as \\uXXXX), numbers in their shortest form that reads back the same,
                  no NaN and no infinity
    prev          text: sha256 of the entry before, 64 lower-case hex digits; 64 zeros for the first
    sha256        text: the SHA-256, in lower-case hex, of these eight lines joined by line feeds,
                  without one at the end:

                      evenarm.entry/1
                      <prev>
                      <seq in decimal>
                      <time_utc>
                      <bench_time_s, an empty line where it is null>
                      <kind>
                      <run, an empty line where it is null>
                      <body>

Texts are hashed as they are stored, in UTF-8, so nothing has to be parsed for it. Neither kind nor
run contains a line feed and no run is empty, so no two entries share the same lines.

Table ``blocks`` holds readings: ``entry`` is the seq of the first entry that names the block,
``name`` the SHA-256 of ``bytes`` in lower-case hex. An entry of kind ``readings`` names it in its
body as ``block``. The bytes are one line of JSON, {"columns":["time_s","signal"],"rows":1000},
ended by a line feed, then each column in that order, every value as a little-endian IEEE 754
double.
"""

from __future__ import annotations

import hashlib
import json
import math
import re
from collections.abc import Mapping
from datetime import UTC, datetime
from typing import Any

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

ENTRY_FORM = "evenarm.entry/1"
KIND = re.compile(r"[a-z][a-z0-9-]{0,63}\Z")
_LONGEST_HEADER = 65536


def canonical_json(body: Mapping[str, Any]) -> str:
    """``body`` as the one JSON text that stands for it.

    Takes mappings with text keys, lists and tuples, texts, booleans, None, integers and finite
    floats, and numpy's scalars and arrays of these. Raises ValueError that names the place of what
    cannot be written, a NaN or an infinity among it: see ``finite``.
    """
    return json.dumps(
        _plain(body, "body"),
        sort_keys=True,
        separators=(",", ":"),
        ensure_ascii=True,
        allow_nan=False,
    )


def finite(value: Any) -> Any:
    """``value`` with null for every number that is not finite, at any depth.

    For bodies in which "no such number" is an honest answer, such as infinite degrees of freedom.
    """
    if isinstance(value, np.generic | np.ndarray):
        return finite(value.tolist())
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, Mapping):
        return {key: finite(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [finite(item) for item in value]
    return value


def _plain(value: Any, place: str) -> Any:
    if isinstance(value, np.generic | np.ndarray):
        value = value.tolist()
    if value is None or isinstance(value, str | bool | int):
        return value
    if isinstance(value, float):
        if not math.isfinite(value):
            raise ValueError(f"{place} is {value}: a journal entry holds finite numbers only")
        return value
    if isinstance(value, Mapping):
        for key in value:
            if not isinstance(key, str):
                raise ValueError(f"{place} has the key {key!r}: keys are texts")
        return {key: _plain(item, f"{place}.{key}") for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(item, f"{place}[{index}]") for index, item in enumerate(value)]
    raise ValueError(f"{place} is of type {type(value).__name__}, which JSON does not have")


def time_text(moment: datetime) -> str:
    """``moment``, which must know its zone, in UTC with six decimals. Raises ValueError."""
    if moment.tzinfo is None:
        raise ValueError("the journal needs times that know their zone")
    return moment.astimezone(UTC).strftime("%Y-%m-%dT%H:%M:%S.%fZ")


def number_text(value: float | None) -> str | None:
    """A number as in JSON. Raises ValueError where it is not finite."""
    return None if value is None else json.dumps(_plain(float(value), "bench_time_s"))


def entry_hash(
    *,
    prev: str,
    seq: int,
    time_utc: str,
    bench_time_s: str | None,
    kind: str,
    run: str | None,
    body: str,
) -> str:
    """The hash of an entry from its columns as stored."""
    lines = (ENTRY_FORM, prev, str(seq), time_utc, bench_time_s or "", kind, run or "", body)
    # Bytes that are not UTF-8 reach us as surrogates; they are hashed as the bytes they were.
    return hashlib.sha256("\n".join(lines).encode("utf-8", "surrogateescape")).hexdigest()


def encode_block(columns: Mapping[str, FloatArray]) -> bytes:
    """Columns of shape (n,), all of one length, as the bytes of a block. Raises ValueError."""
    if not columns:
        raise ValueError("a block of readings needs at least one column")
    arrays = {name: np.asarray(column) for name, column in columns.items()}
    shapes = {array.shape for array in arrays.values()}
    if len(shapes) != 1 or len(next(iter(shapes))) != 1:
        raise ValueError(f"columns of a block have one shape (n,), not {sorted(shapes)}")
    header = {"columns": list(arrays), "rows": next(iter(shapes))[0]}
    parts = [canonical_json(header).encode("ascii") + b"\n"]
    if len(parts[0]) > _LONGEST_HEADER:
        raise ValueError("the names of the columns are too long")
    parts += [array.astype("<f8").tobytes() for array in arrays.values()]
    return b"".join(parts)


def decode_block(data: bytes) -> dict[str, FloatArray]:
    """The columns of a block, each of shape (n,). Raises ValueError where it is not a block."""
    end = data.find(b"\n", 0, _LONGEST_HEADER)
    if end < 0:
        raise ValueError("the block has no header")
    try:
        header = json.loads(data[:end].decode("ascii"))
    except (UnicodeDecodeError, RecursionError) as error:
        raise ValueError("the header of the block cannot be read") from error
    names = header.get("columns") if isinstance(header, dict) else None
    rows = header.get("rows") if isinstance(header, dict) else None
    if (
        not isinstance(names, list)
        or not all(isinstance(name, str) for name in names)
        or not isinstance(rows, int)
        or rows < 0
        or len(data) != end + 1 + 8 * rows * len(names)
    ):
        raise ValueError("the header of the block does not agree with its length")
    values = np.frombuffer(data, dtype="<f8", offset=end + 1).astype(np.float64)
    return {
        name: values[index * rows : (index + 1) * rows].copy() for index, name in enumerate(names)
    }


def block_name(data: bytes) -> str:
    """The name of a block: the hash of its bytes."""
    return hashlib.sha256(data).hexdigest()
