"""A bench as drivers are given it: plain SI numbers and texts, no types of this package."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from bench.spec.model import BenchSpec

__all__ = ["for_drivers"]


def for_drivers(spec: BenchSpec) -> Mapping[str, Any]:
    """What goes into ``drivers.contracts.Context.bench``.

    ``world`` holds world.toml by dotted name in the units that the drivers declare, a pair where
    the value is to be drawn, and lists of such tables for its arrays.
    """
    stage, detector = spec.stage, spec.detector
    return {
        "name": spec.name,
        "path_factor": spec.path_factor,
        "air_index": spec.air_index,
        "opd_per_m": spec.opd_per_m,
        "reference_wavelength_m": spec.reference_wavelength_m,
        "stage": {
            "travel_m": stage.travel_m,
            "speed_m_s": stage.speed_m_s,
            "acceleration_m_s2": stage.acceleration_m_s2,
            "resolution_m": stage.resolution_m,
            "settle_s": stage.settle_s,
            "approach": stage.approach,
            "reversal_allowance_m": stage.reversal_allowance_m,
            "longest_move_m": stage.longest_move_m,
        },
        "detector": {
            "rate_hz": detector.rate_hz,
            "integration_s": detector.integration_s,
            "lag_s": detector.lag_s,
            "unit": detector.unit,
            "range": detector.range,
            "dark": detector.dark,
            "noise": detector.noise,
        },
        "sources": [
            {
                "name": source.name,
                "signal": source.signal,
                "position": source.position,
                "spectrum": dict(source.described),
            }
            for source in spec.sources
        ],
        "expect": None
        if spec.expect is None
        else {
            "zero_m": spec.expect.zero_m,
            "half_width_m": spec.expect.half_width_m,
            "standard_uncertainty_m": spec.expect.standard_uncertainty_m,
        },
        "glass": spec.glass,
        "seed": 0 if spec.simulation is None else spec.simulation.seed,
        "world": spec.world,
    }
