"""Faults of a world: when each begins and ends, and what it does to time and to devices."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from drivers.simulated.settings import FAULTS

__all__ = ["Fault", "Faults"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True)
class Fault:
    """One fault, from ``start_s`` up to but not at ``end_s`` of the time since the world began."""

    kind: str
    start_s: float
    end_s: float = math.inf
    device: str | None = None
    amplitude_m: float = 3e-7
    frequency_hz: float = 23.0


class Faults:
    """All faults of a world. Raises ValueError on a kind that is not in ``FAULTS``."""

    def __init__(self, faults: Iterable[Fault] = ()) -> None:
        self.all = tuple(faults)
        for fault in self.all:
            if fault.kind not in FAULTS:
                raise ValueError(f"no fault is called {fault.kind!r}; there are {sorted(FAULTS)}")

    @classmethod
    def declared(cls, tables: Iterable[Mapping[str, Any]]) -> Faults:
        """From the ``[[fault]]`` tables of a world file, in SI numbers."""
        return cls(
            Fault(
                str(table["kind"]),
                float(table["at"]),
                float(table["at"]) + float(_or(table.get("lasts"), math.inf)),
                table.get("device"),
                float(_or(table.get("amplitude"), Fault.amplitude_m)),
                float(_or(table.get("frequency"), Fault.frequency_hz)),
            )
            for table in tables
        )

    def of(self, kind: str) -> tuple[Fault, ...]:
        return tuple(fault for fault in self.all if fault.kind == kind)

    def during(self, kind: str, time_s: FloatArray) -> BoolArray:
        """Which of ``time_s`` fall within a fault of this kind."""
        struck = np.zeros(np.shape(time_s), dtype=np.bool_)
        for fault in self.of(kind):
            struck |= (time_s >= fault.start_s) & (time_s < fault.end_s)
        return struck

    def active(self, kind: str, time_s: float, device: str | None = None) -> bool:
        """Whether a fault of this kind strikes ``device`` now; one without a device strikes all."""
        return any(
            fault.start_s <= time_s < fault.end_s
            and (device is None or fault.device is None or fault.device == device)
            for fault in self.of(kind)
        )

    def motion_time_s(self, time_s: FloatArray) -> FloatArray:
        """Time as the motor knows it: it stands still while the stage is stalled."""
        moved_s = np.array(time_s, dtype=np.float64)
        # Overlapping stalls stop the motor once, not twice.
        reached_s = -math.inf
        for fault in sorted(self.of("stage stalled"), key=lambda f: f.start_s):
            start_s = max(fault.start_s, reached_s)
            if fault.end_s > start_s:
                moved_s -= np.clip(time_s, start_s, fault.end_s) - start_s
                reached_s = fault.end_s
        return moved_s


def _or(value: Any, default: float) -> Any:
    return default if value is None else value
