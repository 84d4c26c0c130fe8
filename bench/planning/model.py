"""The planner's view of a bench, and what it decides: plain SI numbers, no files, no devices."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

Mode = Literal["sweep", "step"]
Purpose = Literal["search", "final", "verify"]


@dataclass(frozen=True)
class SourceFacts:
    """A source as the plan sees it.

    ``band`` is the half-power band in vacuum wavenumbers, 1/m; ``mean_wavelength_m`` the mean;
    ``coherence_fwhm_m`` the FWHM of the degree of coherence in OPD; ``signal`` the fringe amplitude
    expected at zero OPD, in the detector's unit.
    """

    name: str
    mean_wavelength_m: float
    band: tuple[float, float]
    coherence_fwhm_m: float
    signal: float
    change_time_s: float
    warm_up_s: float


@dataclass(frozen=True)
class BenchFacts:
    """Everything about a bench that a plan depends on.

    ``opd_per_m`` is the signed OPD for one unit of stage reading, air included. ``approach`` is +1
    (increasing) or -1. ``glass_shift_m`` is the standard uncertainty, in stage reading, of the
    shift of the group zero between two sources that unknown residual glass allows. ``lag_s`` is the
    delay between a position and the reading that belongs to it.
    """

    opd_per_m: float
    travel_m: tuple[float, float]
    speed_m_s: float
    acceleration_m_s2: float
    resolution_m: float
    settle_s: float
    approach: int
    reversal_allowance_m: float
    longest_move_m: float
    rate_hz: float
    integration_s: float
    noise: float
    accept_residual_opd_m: float
    glass_shift_m: float
    sources: tuple[SourceFacts, ...]
    lag_s: float = 0.0


@dataclass(frozen=True)
class Leg:
    """One scan of the plan: from ``start_m`` to ``stop_m`` in the approach direction.

    A sweep has ``speed_m_s``, a step scan ``increment_m``; the other is None.
    ``half_width_after_m`` is of the 95 % interval in stage reading, if the packet is there.
    """

    source: str
    mode: Mode
    purpose: Purpose
    start_m: float
    stop_m: float
    speed_m_s: float | None
    increment_m: float | None
    readings: int
    expected_time_s: float
    half_width_after_m: float
    detection_probability: float
    why: str


@dataclass(frozen=True)
class Plan:
    """The legs in their order, what they cost and what they beat."""

    legs: tuple[Leg, ...]
    expected_time_s: float
    worst_time_s: float
    miss_probability: float
    white_only_time_s: float | None
    lower_bound_time_s: float
