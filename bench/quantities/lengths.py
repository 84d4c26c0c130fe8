"""Stage readings, displacements and optical path differences: three types that do not mix."""

from __future__ import annotations

import math
from dataclasses import dataclass

from bench.errors import QuantityError


@dataclass(frozen=True, order=True)
class StageDisplacement:
    """A difference of two readings of the stage, in metres."""

    m: float

    def __add__(self, other: StageDisplacement) -> StageDisplacement:
        return StageDisplacement(self.m + other.m) if _same(self, other) else NotImplemented

    def __sub__(self, other: StageDisplacement) -> StageDisplacement:
        return StageDisplacement(self.m - other.m) if _same(self, other) else NotImplemented

    def __neg__(self) -> StageDisplacement:
        return StageDisplacement(-self.m)

    def __abs__(self) -> StageDisplacement:
        return StageDisplacement(abs(self.m))


@dataclass(frozen=True, order=True)
class StagePosition:
    """A reading of the stage, in metres."""

    m: float

    def __add__(self, other: StageDisplacement) -> StagePosition:
        if not isinstance(other, StageDisplacement):
            return NotImplemented
        return StagePosition(self.m + other.m)

    def __sub__(self, other: StagePosition) -> StageDisplacement:
        return StageDisplacement(self.m - other.m) if _same(self, other) else NotImplemented


@dataclass(frozen=True, order=True)
class Opd:
    """Optical path difference, arm A minus arm B, as a vacuum length in metres."""

    m: float

    def __add__(self, other: Opd) -> Opd:
        return Opd(self.m + other.m) if _same(self, other) else NotImplemented

    def __sub__(self, other: Opd) -> Opd:
        return Opd(self.m - other.m) if _same(self, other) else NotImplemented

    def __neg__(self) -> Opd:
        return Opd(-self.m)

    def __abs__(self) -> Opd:
        return Opd(abs(self.m))


def _same(one: object, other: object) -> bool:
    return type(one) is type(other)


@dataclass(frozen=True)
class PathFactor:
    """Signed OPD for one metre of stage reading, the air's index included; never zero."""

    opd_per_m: float

    def __post_init__(self) -> None:
        if not math.isfinite(self.opd_per_m) or self.opd_per_m == 0:
            raise QuantityError(
                f"a path factor of {self.opd_per_m} cannot be used",
                why="the stage would not change the path difference",
                mend="2 for a folded arm that moves along its beam",
            )

    def opd(self, displacement: StageDisplacement) -> Opd:
        """The OPD that a displacement of the stage makes."""
        if not isinstance(displacement, StageDisplacement):
            raise TypeError(f"{type(displacement).__name__} is not a StageDisplacement")
        return Opd(displacement.m * self.opd_per_m)

    def displacement(self, opd: Opd) -> StageDisplacement:
        """The displacement of the stage that makes an OPD."""
        if not isinstance(opd, Opd):
            raise TypeError(f"{type(opd).__name__} is not an Opd")
        return StageDisplacement(opd.m / self.opd_per_m)
