"""Why each leg is there, in one sentence for the person at the bench."""

from __future__ import annotations

from bench.planning.model import BenchFacts, SourceFacts
from bench.planning.sampling import Way, packet_fwhm_m

__all__ = ["length_text", "why_final", "why_narrow", "why_search", "why_verify"]


def length_text(length_m: float) -> str:
    """A length in two or three digits and a unit that suits it."""
    for unit, size in (("m", 1.0), ("mm", 1e-3), ("µm", 1e-6)):
        if abs(length_m) >= 0.9995 * size:
            return f"{length_m / size:.3g} {unit}"
    return f"{length_m / 1e-9:.3g} nm"


def _pace(way: Way) -> str:
    if way.speed_m_s is not None:
        return f"{length_text(way.speed_m_s)}/s"
    return f"steps of {length_text(way.spacing_m)}"


def _reach(facts: BenchFacts, source: SourceFacts, way: Way) -> str:
    width = packet_fwhm_m(facts, source)
    return (
        f"at {_pace(way)} the {length_text(width)} packet of {source.name} is met by"
        f" {width / way.spacing_m:.0f} readings"
    )


def why_search(
    facts: BenchFacts, source: SourceFacts, way: Way, *, number: int, careful: bool, changed: bool
) -> str:
    if number > 0:
        return "The next most likely part, only if nothing was seen before."
    if careful:
        return (
            f"Scanned once in vain, so now with care: {_reach(facts, source, way)},"
            f" {way.per_fringe:.1f} to a fringe."
        )
    reason = _reach(facts, source, way)
    if way.undersampled:
        reason += ", and its known band makes sense of fewer than two to a fringe"
    if changed:
        reason += "; quickest even with the change of source"
    return reason[0].upper() + reason[1:] + "."


def why_narrow(source: SourceFacts, before_m: float, after_m: float) -> str:
    return (
        f"Narrows ±{length_text(before_m)} to ±{length_text(after_m)} with {source.name} before"
        " the slow scan."
    )


def why_final(source: SourceFacts, way: Way) -> str:
    return (
        f"{source.name[0].upper() + source.name[1:]} has the shortest packet: all of it at"
        f" {way.per_fringe:.0f} readings a fringe pins the zero to nanometres."
        if way.sd_m < 0.1e-6
        else f"{source.name[0].upper() + source.name[1:]} has the shortest packet: all of it at"
        f" {way.per_fringe:.0f} readings a fringe pins the zero."
    )


def why_verify() -> str:
    return "The same again from a fresh approach, because two scans have to agree."
