"""From the readings of a scan to the findings that go into the journal."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from bench.fringes import locate
from bench.fringes.model import Estimate, Knowledge, Located, Scan
from bench.fringes.results import scale_share
from bench.spec.model import BenchSpec, SourceSpec

from .scanning import POLL_S, Readings

__all__ = ["findings", "is_dark", "locate_readings"]

NO_LIGHT = (
    "the detector sees only its dark level: is the lamp on, is a beam or the detector blocked?"
)


def locate_readings(spec: BenchSpec, source: SourceSpec, readings: Readings) -> Located:
    """Locate the zero in a scan of this bench with this source."""
    scan = Scan(
        x=readings.position_m,
        signal=readings.signal,
        opd_per_x=spec.opd_per_m,
        opd_per_x_relative_uncertainty=spec.stage.scale_uncertainty,
        saturated=readings.saturated > 0,
        dark=spec.detector.dark,
    )
    knowledge = Knowledge(
        band=source.band,
        at_wavelength_m=spec.reference_wavelength_m,
        glass=spec.glass,
        noise=spec.detector.noise,
        light=_light(source),
    )
    return locate(scan, knowledge)


def _light(source: SourceSpec) -> tuple[float, float] | None:
    """The outermost wavenumbers where the source has a hundredth of its greatest power."""
    bright = np.flatnonzero(source.power >= 0.01 * float(np.max(source.power, initial=0.0)))
    if bright.size < 2:
        return None
    return float(source.wavenumber[bright[0]]), float(source.wavenumber[bright[-1]])


def is_dark(spec: BenchSpec, source: SourceSpec, readings: Readings) -> bool:
    """Whether the level above dark is too low to carry a twentieth of the fringes expected.

    A mean level is never below the amplitude of its fringes, so a source that is on shows here
    whatever the contrast.
    """
    if spec.detector.dark is None or not readings.signal.size:
        return False
    above = float(np.median(readings.signal)) - spec.detector.dark
    return above < 0.05 * source.signal


def findings(
    spec: BenchSpec,
    source: SourceSpec,
    readings: Readings,
    located: Located,
    speed_m_s: float | None,
) -> dict[str, Any]:
    """The body of a ``located`` entry: plain numbers with their units in names or beside them."""
    body: dict[str, Any] = {
        "found": located.found,
        "reason": located.reason,
        "noise": located.noise if math.isfinite(located.noise) else None,
        "false_alarm_probability": located.false_alarm_probability,
        "notices": [{"code": n.code, "message": n.message} for n in located.notices],
    }
    unusable = _unusable(spec, readings, located)
    # Fringes that were found are light, however little of it was expected.
    if not located.found and is_dark(spec, source, readings):
        unusable, body["dark"] = NO_LIGHT, True
    if unusable:
        body |= {"found": False, "reason": unusable}
    if not body["found"] or located.zero is None:
        body["weakest_contrast"] = located.weakest_contrast
        # Readings in step with the fringes would have shown no packet that is there.
        body["blind"] = any(notice.code == "undersampled" for notice in located.notices)
        return body
    zero_m = located.zero.value
    body["zero_m"] = zero_m
    body["zero_u_m"] = math.hypot(
        located.zero.standard_uncertainty, _axis_u_m(spec, located, speed_m_s)
    )
    body["zero_common_u_m"] = _scale_u_m(spec, located)
    order = np.argsort(readings.position_m)
    body["zero_time_s"] = float(
        np.interp(zero_m, readings.position_m[order], readings.time_s[order])
    )
    unit = spec.detector.unit
    _put(body, "at_wavelength", located.at_wavelength_m, "nm", 1e9)
    _put(body, "contrast", located.contrast, "1", 1.0)
    _put(body, "amplitude", located.amplitude, unit, 1.0)
    _put(body, "mean_wavelength", located.mean_wavelength_m, "nm", 1e9)
    if located.coherence is not None:
        _put(body, "packet_width", located.coherence.packet_width_m, "um", 1e6)
        _put(body, "coherence_fwhm", located.coherence.fwhm_m, "um", 1e6)
    if located.residual_glass is not None:
        _put(body, "residual_glass", located.residual_glass.thickness_m, "mm", 1e3)
        _put(body, "dispersion", located.residual_glass.dispersion_fs2, "fs^2", 1.0)
    if located.fringe_zero is not None:
        _put(body, "fringe_zero", located.fringe_zero.x, "um", 1e6)
        body["fringe_kind"] = located.fringe_zero.kind
        body["fringe_probability"] = located.fringe_zero.probability
    return body


def _unusable(spec: BenchSpec, readings: Readings, located: Located) -> str:
    """Why a zero found is not one to drive to, such as one where the scan saw half a packet."""
    if not located.found or located.zero is None:
        return ""
    u_m = located.zero.standard_uncertainty
    if not (math.isfinite(located.zero.value) and math.isfinite(u_m) and u_m > 0.0):
        return "a packet is there, but nothing can be said of how sure its place is"
    room_m = 0.0
    if located.coherence is not None and located.coherence.packet_width_m is not None:
        room_m = located.coherence.packet_width_m.value / abs(spec.opd_per_m) / 2.0
    low_m, high_m = readings.position_m.min() + room_m, readings.position_m.max() - room_m
    if low_m <= located.zero.value <= high_m:
        return ""
    return "the packet is cut by the end of the scan"


def _scale_u_m(spec: BenchSpec, located: Located) -> float:
    """The part of the zero's uncertainty that the axis' scale gives every scan alike."""
    if spec.reference_wavelength_m is None:
        return 0.0
    return scale_share(
        located.residual_glass,
        spec.reference_wavelength_m,
        spec.stage.scale_uncertainty,
        spec.opd_per_m,
    )


def _axis_u_m(spec: BenchSpec, located: Located, speed_m_s: float | None) -> float:
    """What the rounding of the read-backs leaves in the axis, smoothed over the packet.

    A rounding error is rectangular over the resolution (GUM 4.3.7); the read-backs that fall within
    the packet's width average it.
    """
    rounding_m = spec.stage.resolution_m / math.sqrt(12.0)
    if speed_m_s is None or located.coherence is None or located.coherence.packet_width_m is None:
        return rounding_m
    width_m = located.coherence.packet_width_m.value / abs(spec.opd_per_m)
    read_backs = max(1.0, width_m / speed_m_s / POLL_S)
    return rounding_m / math.sqrt(read_backs)


def _put(
    body: dict[str, Any], name: str, estimate: Estimate | None, unit: str, factor: float
) -> None:
    if estimate is None or not math.isfinite(estimate.value):
        return
    body[name] = {"value": estimate.value * factor, "unit": unit}
    if math.isfinite(estimate.standard_uncertainty):
        body[name]["standard_uncertainty"] = estimate.standard_uncertainty * factor
