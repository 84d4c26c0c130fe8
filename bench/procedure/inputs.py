"""What can happen in a run, as the conductor reports it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any


@dataclass(frozen=True)
class Begin:
    """The run begins; ``body`` is kept as it is, ``interrupted`` tells of an earlier crash."""

    body: Mapping[str, Any]
    interrupted: str
    time_s: float


@dataclass(frozen=True)
class Continue:
    time_s: float


@dataclass(frozen=True)
class Answered:
    accepted: bool
    by: str
    time_s: float


@dataclass(frozen=True)
class SourceReady:
    time_s: float


@dataclass(frozen=True)
class HomeEnded:
    position_m: float
    time_s: float


@dataclass(frozen=True)
class MoveEnded:
    position_m: float
    time_s: float


@dataclass(frozen=True)
class ScanEnded:
    """``read_m`` are the lowest and highest position with a usable reading."""

    position_m: float
    read_m: tuple[float, float]
    rows: int
    mean_time_s: float
    time_s: float


@dataclass(frozen=True)
class LocateEnded:
    """``body`` says found, zero_m, zero_u_m, zero_time_s, reason and the other findings."""

    body: Mapping[str, Any]
    time_s: float


@dataclass(frozen=True)
class Failed:
    """A device failed; the stage was told to stop and then said where it is, if it could."""

    what: str
    device: str
    mend: str
    position_m: float | None
    position_known: bool
    at_rest: bool
    time_s: float


@dataclass(frozen=True)
class StopAsked:
    by: str
    reason: str
    time_s: float


@dataclass(frozen=True)
class Stopped:
    """What a stop came to. ``at_rest`` only where a read-back said that nothing moves."""

    position_m: float | None
    position_known: bool
    at_rest: bool
    reason: str
    time_s: float


Input = (
    Begin
    | Continue
    | Answered
    | SourceReady
    | HomeEnded
    | MoveEnded
    | ScanEnded
    | LocateEnded
    | Failed
    | StopAsked
    | Stopped
)
