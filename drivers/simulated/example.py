"""A small bench as drivers are told of it, to try a driver without writing a bench.toml."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from drivers.clock import VirtualClock
from drivers.contracts import Clock, Context

__all__ = ["example_bench", "example_context"]


def example_bench(
    world: Mapping[str, Any] | None = None, *, seed: int = 7, **changes: Mapping[str, Any]
) -> dict[str, Any]:
    """``Context.bench`` of a folded arm with a white source and a laser.

    ``world`` is laid over a quiet world with its zero at 13.2184 mm; ``changes`` over the tables
    ``stage`` and ``detector``.
    """
    stage: dict[str, Any] = {
        "travel_m": (0.0, 25e-3),
        "speed_m_s": 1e-3,
        "acceleration_m_s2": 1e-2,
        "resolution_m": 20e-9,
        "settle_s": 0.05,
        "approach": "increasing",
        "reversal_allowance_m": 20e-6,
        "longest_move_m": 5e-3,
    }
    detector: dict[str, Any] = {
        "rate_hz": 1e3,
        "integration_s": 0.2e-3,
        "lag_s": 0.0,
        "unit": "V",
        "range": (0.0, 5.0),
        "dark": 0.02,
        "noise": 5e-3,
    }
    white = {"shape": "gaussian", "centre_m": 600e-9, "fwhm_m": 60e-9}
    laser = {"shape": "lorentzian", "centre_m": 632.991e-9, "fwhm_hz": 1e9}
    return {
        "path_factor": 2.0,
        "air_index": 1.00027,
        "opd_per_m": 2.0 * 1.00027,
        "reference_wavelength_m": 600e-9,
        "stage": stage | dict(changes.get("stage", {})),
        "detector": detector | dict(changes.get("detector", {})),
        "sources": [
            {"name": "white", "signal": 1.0, "spectrum": white},
            {"name": "laser", "signal": 1.0, "spectrum": laser},
        ],
        "expect": {"zero_m": 12.5e-3, "half_width_m": 5e-3},
        "seed": seed,
        "world": {"truth.zero": 13.2184e-3} | dict(world or {}),
    }


def example_context(bench: Mapping[str, Any] | None = None, clock: Clock | None = None) -> Context:
    """What ``Driver.open`` wants, with a clock that jumps unless another is given."""
    return Context(
        clock=clock if clock is not None else VirtualClock(),
        folder=".",
        bench=bench if bench is not None else example_bench(),
    )
