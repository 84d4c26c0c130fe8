"""A bench as the planner sees it, drawn from its description."""

from __future__ import annotations

import math
from dataclasses import dataclass

from bench.errors import UsageError
from bench.planning.belief import Belief
from bench.planning.model import BenchFacts, SourceFacts
from bench.spec.model import BenchSpec, SourceSpec

__all__ = [
    "UNKNOWN_GLASS_M",
    "Excluded",
    "belief_from",
    "bench_facts",
    "excluded_sources",
]

# Common practice, no source: plates and prisms of one batch match to a tenth of a millimetre;
# where no glass is named, a fifth of that is still allowed for (windows, cement, coatings).
UNKNOWN_GLASS_M = 0.1e-3
UNNAMED_GLASS_M = 0.02e-3
UNNAMED_GLASS = "N-BK7"
# What coatings and the fit itself may shift between two sources, in OPD.
LEAST_SHIFT_OPD_M = 50e-9
# Expected noise of one reading where nobody measured it, as a part of the weakest source's signal.
ASSUMED_NOISE = 0.01


@dataclass(frozen=True)
class Excluded:
    """A source that the plan cannot use, and why."""

    name: str
    reason: str


def bench_facts(spec: BenchSpec) -> BenchFacts:
    """What a plan depends on, in SI numbers.

    Sources whose fringes reach beyond the whole expected range are left out: see
    ``excluded_sources``. Raises UsageError where the stage has no limits, or no source is left.
    """
    travel_m = _travel(spec)
    left_out = {entry.name for entry in excluded_sources(spec)}
    usable = [source for source in spec.sources if source.name not in left_out]
    if not usable:
        reasons = "; ".join(f"{entry.name}: {entry.reason}" for entry in excluded_sources(spec))
        raise UsageError(
            "no source of this bench can show where the zero is",
            where=str(spec.path),
            why=reasons or "there is no [[source]]",
            mend="add a [[source]] with a broad spectrum, such as white light",
        )
    detector = spec.detector
    noise = detector.noise
    if noise is None or noise <= 0.0:
        noise = ASSUMED_NOISE * min(source.signal for source in usable)
    return BenchFacts(
        opd_per_m=spec.opd_per_m,
        travel_m=travel_m,
        speed_m_s=spec.stage.speed_m_s,
        acceleration_m_s2=spec.stage.acceleration_m_s2,
        resolution_m=spec.stage.resolution_m,
        settle_s=spec.stage.settle_s,
        approach=1 if spec.stage.approach == "increasing" else -1,
        reversal_allowance_m=spec.stage.reversal_allowance_m,
        longest_move_m=spec.stage.longest_move_m,
        rate_hz=detector.rate_hz,
        integration_s=detector.integration_s,
        noise=noise,
        accept_residual_opd_m=spec.accept.residual_opd_m,
        glass_shift_m=_glass_shift_m(spec, usable),
        sources=tuple(_source_facts(source) for source in usable),
        lag_s=detector.lag_s,
    )


def belief_from(spec: BenchSpec) -> Belief:
    """Where the zero may be before anything is measured: [expect], or anywhere in the travel.

    Raises UsageError where there is neither.
    """
    expect = spec.expect
    if expect is not None and expect.standard_uncertainty_m is not None:
        return Belief.normal(expect.zero_m, expect.standard_uncertainty_m)
    if expect is not None and expect.half_width_m is not None:
        return Belief.uniform(expect.zero_m, expect.half_width_m)
    low, high = _travel(spec)
    return Belief.uniform((low + high) / 2.0, (high - low) / 2.0)


def excluded_sources(spec: BenchSpec) -> tuple[Excluded, ...]:
    """Sources that cannot locate the packet, because it is wider than the range to be searched."""
    expected_m = _expected_range_m(spec)
    found = []
    for source in spec.sources:
        packet_m = source.coherence_fwhm_m / abs(spec.opd_per_m)
        if not packet_m <= expected_m:
            reach = "further than can be told" if math.isnan(packet_m) else _millimetres(packet_m)
            found.append(
                Excluded(
                    source.name,
                    f"its fringes reach over {reach} of travel, all of the"
                    f" {_millimetres(expected_m)} where the zero is expected, so they show no"
                    " place",
                )
            )
    return tuple(found)


def _millimetres(length_m: float) -> str:
    return f"{length_m * 1e3:.4g} mm"


def _travel(spec: BenchSpec) -> tuple[float, float]:
    if spec.stage.travel_m is None:
        raise UsageError(
            "nothing may move on this bench",
            where=str(spec.path),
            why="[stage] travel is missing: no limits, no motion",
            mend='give the soft limits, such as travel = ["0 mm", "25 mm"]',
        )
    return spec.stage.travel_m


def _expected_range_m(spec: BenchSpec) -> float:
    low, high = _travel(spec)
    expect, width = spec.expect, math.inf
    if expect is not None and expect.half_width_m is not None:
        width = 2.0 * expect.half_width_m
    elif expect is not None and expect.standard_uncertainty_m is not None:
        width = 4.0 * expect.standard_uncertainty_m
    return min(width, high - low)


def _source_facts(source: SourceSpec) -> SourceFacts:
    return SourceFacts(
        name=source.name,
        mean_wavelength_m=source.mean_wavelength_m,
        band=source.band,
        coherence_fwhm_m=source.coherence_fwhm_m,
        signal=source.signal,
        change_time_s=source.change_time_s,
        warm_up_s=source.warm_up_s,
    )


def _glass_shift_m(spec: BenchSpec, sources: list[SourceSpec]) -> float:
    """Standard uncertainty of the shift of the zero between the two sources furthest apart.

    Thickness times the difference of the group indices over the path factor: glass more in one arm
    moves the packet by (n_g - 1) thickness in OPD, which differs from source to source.
    """
    from bench.optics.glass import group_index, material

    thickness_m = UNKNOWN_GLASS_M if spec.glass else UNNAMED_GLASS_M
    name = spec.glass or UNNAMED_GLASS
    low, high = material(name).range_m
    indices = [
        float(group_index(name, min(max(source.mean_wavelength_m, low), high)))
        for source in sources
    ]
    glass_opd_m = thickness_m * (max(indices) - min(indices))
    return math.hypot(glass_opd_m, LEAST_SHIFT_OPD_M) / abs(spec.opd_per_m)
