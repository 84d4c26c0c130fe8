"""A bench as it stands on the table, in SI numbers, after every check of its description.

Every length is in metres, every time in seconds, unless the name says otherwise.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
Direction = Literal["increasing", "decreasing"]


@dataclass(frozen=True)
class AcceptSpec:
    """What has to hold before a run may call its zero accepted."""

    residual_opd_m: float
    scans_agree_m: float  # of OPD
    coverage_factor: float


@dataclass(frozen=True)
class StageSpec:
    driver: str
    travel_m: tuple[float, float] | None  # None: no limits given, and then no motion
    speed_m_s: float
    acceleration_m_s2: float
    resolution_m: float
    settle_s: float
    approach: Direction
    reversal_allowance_m: float
    longest_move_m: float
    settings: Mapping[str, Any] = field(default_factory=dict)
    scale_uncertainty: float = 1e-3  # relative, of a reading's worth over a packet's width


@dataclass(frozen=True)
class DetectorSpec:
    driver: str
    rate_hz: float
    integration_s: float
    lag_s: float
    unit: str
    range: tuple[float, float] | None
    dark: float | None
    noise: float | None
    settings: Mapping[str, Any] = field(default_factory=dict)


@dataclass(frozen=True)
class SourceSpec:
    """One source; its spectrum is sampled in ``wavenumber`` (1/m, rising) and ``power`` (relative,
    per wavenumber), both of shape (n,)."""

    name: str
    wavenumber: FloatArray
    power: FloatArray
    signal: float
    change_time_s: float
    warm_up_s: float
    laser_class: str | None  # None: nothing was said, and then the strictest text is shown
    risk_group: str | None
    position: str | None = None
    mean_wavelength_m: float = float("nan")
    band: tuple[float, float] = (float("nan"), float("nan"))
    coherence_fwhm_m: float = float("nan")
    coherence_rule_m: float = float("nan")
    coherence_integral_m: float = float("nan")
    described: Mapping[str, Any] = field(default_factory=dict)  # the spectrum as for_drivers has it


@dataclass(frozen=True)
class ExpectSpec:
    zero_m: float
    half_width_m: float | None
    standard_uncertainty_m: float | None


@dataclass(frozen=True)
class ClimateSpec:
    driver: str | None
    temperature_c: float
    pressure_pa: float
    relative_humidity: float
    settings: Mapping[str, Any] = field(default_factory=dict)


@dataclass(frozen=True)
class SimulationSpec:
    world: Path
    seed: int


@dataclass(frozen=True)
class BenchSpec:
    """The whole bench. ``path`` is bench.toml itself and ``sha256`` the hash of its bytes."""

    name: str
    path: Path
    sha256: str
    path_factor: float
    air_index: float
    reference_wavelength_m: float | None
    safety_contact: str | None
    allow_unattended: bool
    accept: AcceptSpec
    stage: StageSpec
    detector: DetectorSpec
    sources: tuple[SourceSpec, ...]
    expect: ExpectSpec | None
    glass: str | None
    climate: ClimateSpec | None
    changer: Mapping[str, Any] | None
    records_url: str  # with any relative SQLite path made absolute from the bench's folder
    simulation: SimulationSpec | None
    simulated: bool = False  # every device named here is a simulated one
    world: Mapping[str, Any] = field(default_factory=dict)  # world.toml in SI numbers, checked

    @property
    def folder(self) -> Path:
        return self.path.parent

    @property
    def opd_per_m(self) -> float:
        """Signed OPD for one metre of stage reading, the air's index included."""
        return self.air_index * self.path_factor
