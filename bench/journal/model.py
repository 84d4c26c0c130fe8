"""What the journal says: plain frozen records, no database behind them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

GENESIS = "0" * 64


@dataclass(frozen=True)
class Entry:
    """One thing that happened.

    ``seq`` counts from 1 without gaps. ``time_utc`` is ISO 8601 with microseconds and a ``Z``,
    ``bench_time_s`` seconds of the bench's own clock where there is one. ``prev`` and ``sha256``
    are lower-case hex; see ``bench.journal.canonical`` for what is hashed.
    """

    seq: int
    time_utc: str
    kind: str
    run: str | None
    body: Mapping[str, Any]
    prev: str
    sha256: str
    bench_time_s: float | None = None


@dataclass(frozen=True)
class Head:
    """The last link of the chain: how many entries, and the hash that stands for all of them."""

    entries: int
    sha256: str


@dataclass(frozen=True)
class Verification:
    """What a whole check found. ``head`` is the hash of the last entry, zeros for an empty journal.

    Each problem names the entry that it concerns, where it concerns one.
    """

    entries: int
    intact: bool
    head: str
    problems: tuple[str, ...] = ()


@dataclass(frozen=True)
class RunSummary:
    """A run in one line. ``outcome`` is ``open`` where the journal holds no end of it.

    ``zero`` and ``residual_opd`` are quantities as mappings of value, unit and, where known,
    standard_uncertainty; None where the run did not get that far. ``acknowledged_by`` is who
    answered for the cautions, empty where nobody did.
    """

    run: str
    started_utc: str
    procedure: str
    bench_name: str
    operator: str
    outcome: str
    entries: int
    first_seq: int
    simulated: bool = False
    reason: str = ""
    ended_utc: str | None = None
    zero: Mapping[str, Any] | None = None
    residual_opd: Mapping[str, Any] | None = None
    acknowledged_by: str = ""


@dataclass(frozen=True)
class MeasurementRecord:
    """A named quantity as it was written down; ``body`` holds everything that traces it."""

    id: str
    name: str
    run: str | None
    seq: int
    time_utc: str
    value: float | None
    unit: str
    standard_uncertainty: float | None = None
    degrees_of_freedom: float | None = None
    body: Mapping[str, Any] = field(default_factory=dict)
