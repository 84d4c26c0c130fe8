"""Locating the zero: a scan in, a located zero and its honesty out. Pure: no clock, no file."""

from bench.fringes.locate import locate
from bench.fringes.model import (
    CoherenceLengths,
    Envelope,
    Estimate,
    FringeZero,
    Knowledge,
    Located,
    Notice,
    ResidualGlass,
    Scan,
)

__all__ = [
    "CoherenceLengths",
    "Envelope",
    "Estimate",
    "FringeZero",
    "Knowledge",
    "Located",
    "Notice",
    "ResidualGlass",
    "Scan",
    "locate",
]
