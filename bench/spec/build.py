"""Validated tables into the parts of a ``BenchSpec``, with the defaults that depend on others."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from bench.spec.model import AcceptSpec, ClimateSpec, DetectorSpec, ExpectSpec, StageSpec

if TYPE_CHECKING:
    from bench.spec import schema

STANDARD_AIR_INDEX = 1.00027  # where no climate is known; it moves no zero, only lengths in OPD
LONGEST_MOVE_M = 5e-3


def air_index(climate: ClimateSpec | None, wavelength_m: float) -> float:
    """Phase index of the air at a vacuum wavelength, by Ciddor's equations where it is known."""
    if climate is None:
        return STANDARD_AIR_INDEX
    from bench.optics.air import refractive_index

    return float(
        refractive_index(
            wavelength_m, climate.temperature_c, climate.pressure_pa, climate.relative_humidity
        )
    )


def accept(table: schema.Accept) -> AcceptSpec:
    return AcceptSpec(table.residual_opd, table.scans_agree, table.coverage_factor)


def longest_move_m(table: schema.Stage) -> float:
    """As given, else 5 mm or the whole travel where that is shorter."""
    if table.longest_move is not None:
        return table.longest_move
    if table.travel is None:
        return LONGEST_MOVE_M
    return min(LONGEST_MOVE_M, table.travel[1] - table.travel[0])


def stage(table: schema.Stage, settings: Mapping[str, Any]) -> StageSpec:
    return StageSpec(
        driver=table.driver,
        travel_m=table.travel,
        speed_m_s=table.speed,
        acceleration_m_s2=table.acceleration,
        resolution_m=table.resolution,
        settle_s=table.settle,
        approach=table.approach,
        reversal_allowance_m=table.reversal_allowance,
        longest_move_m=longest_move_m(table),
        settings=settings,
        scale_uncertainty=table.scale_uncertainty,
    )


def integration_s(table: schema.Detector) -> float:
    """As given, else the whole time between two readings."""
    return 1.0 / table.rate if table.integration is None else table.integration


def detector(table: schema.Detector, settings: Mapping[str, Any], unit: str) -> DetectorSpec:
    limits = None if table.range is None else (table.range[0].si, table.range[1].si)
    return DetectorSpec(
        driver=table.driver,
        rate_hz=table.rate,
        integration_s=integration_s(table),
        lag_s=table.lag,
        unit=unit,
        range=limits,
        dark=None if table.dark is None else table.dark.si,
        noise=None if table.noise is None else table.noise.si,
        settings=settings,
    )


def expect(table: schema.Expect | None) -> ExpectSpec | None:
    """The prior; an uncertainty written with the zero itself counts as its standard uncertainty."""
    if table is None:
        return None
    sd = table.standard_uncertainty
    if sd is None and table.half_width is None:
        sd = table.zero.si_uncertainty
    return ExpectSpec(table.zero.si, table.half_width, sd)


def changer(table: schema.Changer | None, settings: Mapping[str, Any]) -> dict[str, Any] | None:
    return None if table is None else {"driver": table.driver, "settings": dict(settings)}
