"""What a screen may know of a run while it goes on: one immutable snapshot, taken at any time."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from bench.fringes.model import Located

FloatArray = NDArray[np.float64]
StepState = Literal["open", "now", "done", "failed"]


@dataclass(frozen=True)
class StepView:
    """A step of the procedure as a line: its title and where the run is with it."""

    title: str
    state: StepState
    detail: str = ""


@dataclass(frozen=True)
class Question:
    """Something only a person can answer: "acknowledge" wants a name, "confirm" yes or no."""

    id: str
    kind: Literal["acknowledge", "confirm"]
    title: str
    lines: tuple[str, ...]


@dataclass(frozen=True)
class LiveView:
    """A run at one moment.

    ``trace_x_m`` and ``trace_signal`` hold the newest scan, shape (n,), thinned for drawing.
    ``half_width_m`` is of the 95 % interval of the zero in stage reading.
    """

    run_id: str
    bench_name: str
    procedure: str
    simulated: bool
    steps: tuple[StepView, ...] = ()
    doing: str = ""
    next_action: str = ""
    question: Question | None = None
    source: str | None = None
    stage_position_m: float | None = None
    stage_moving: bool = False
    stage_known: bool = False
    detector_level: float | None = None
    detector_saturated: bool = False
    detector_unit: str = "V"
    trace_x_m: FloatArray = field(default_factory=lambda: np.empty(0))
    trace_signal: FloatArray = field(default_factory=lambda: np.empty(0))
    trace_label: str = ""
    located: Located | None = None
    zero_m: float | None = None
    zero_standard_uncertainty_m: float | None = None
    half_width_m: float | None = None
    half_width_start_m: float | None = None
    opd_per_m: float = 2.0
    residual_opd_m: float | None = None
    residual_opd_standard_uncertainty_m: float | None = None
    elapsed_s: float = 0.0
    remaining_s: float | None = None
    progress: float | None = None  # of the present scan or move, 0 to 1
    outcome: str | None = None
    reason: str = ""
    result: dict[str, Any] = field(default_factory=dict)
    head: str = ""
    accept_residual_opd_m: float | None = None  # what [accept] asks for, marked on pictures
    position_trusted: bool = True  # False: a reading may be there, but the run does not rely on it
    at_rest: bool = True  # False after an end at which the stage did not say that it stands still
    roughly_located: bool = False  # a packet was seen, by search scans only so far
    error_lines: tuple[str, ...] = ()  # what, where, why, mend of a run that could not go on
