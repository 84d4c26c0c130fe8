"""From two located zeros and the place where the stage was left to a verdict. Pure."""

from __future__ import annotations

import math
from dataclasses import dataclass

from bench.spec.model import AcceptSpec

__all__ = ["Verdict", "ZeroFound", "combine", "judge"]


@dataclass(frozen=True)
class ZeroFound:
    """A zero as one scan saw it: stage reading and its standard uncertainty, at a bench time."""

    scan: str
    zero_m: float
    u_m: float
    time_s: float


@dataclass(frozen=True)
class Verdict:
    """What a run may claim. ``residual_*`` is the OPD where the stage was left, at ``time_s``."""

    accepted: bool
    reason: str
    zero_m: float
    zero_u_m: float
    residual_opd_m: float
    residual_u_m: float
    scans_differ_opd_m: float
    time_s: float


def combine(first: ZeroFound, second: ZeroFound) -> ZeroFound:
    """Inverse-variance mean of two independent zeros.

    Where they differ by more than their uncertainties explain, the uncertainty is widened by the
    square root of the reduced chi-square (Birge's ratio; common practice in adjusting constants).
    """
    w1, w2 = 1.0 / first.u_m**2, 1.0 / second.u_m**2
    total = w1 + w2
    zero_m = (w1 * first.zero_m + w2 * second.zero_m) / total
    chi2 = (first.zero_m - second.zero_m) ** 2 / (first.u_m**2 + second.u_m**2)
    return ZeroFound(
        scan=f"{first.scan}, {second.scan}",
        zero_m=zero_m,
        u_m=math.sqrt(max(1.0, chi2) / total),
        time_s=(w1 * first.time_s + w2 * second.time_s) / total,
    )


def judge(
    accept: AcceptSpec,
    *,
    opd_per_m: float,
    resolution_m: float,
    first: ZeroFound,
    second: ZeroFound,
    left_at_m: float,
    left_at_s: float,
) -> Verdict:
    """Apply [accept] with its guard band: \\|residual OPD\\| + k u must be within the limit.

    The uncertainty of the residual OPD holds that of the zero, the resolution of the read-back
    (rectangular, GUM 4.3.7) and what the zero may have drifted since, judged from how far apart the
    two scans saw it.
    """
    zero = combine(first, second)
    scale = abs(opd_per_m)
    residual_m = opd_per_m * (left_at_m - zero.zero_m)
    apart_s = abs(second.time_s - first.time_s)
    differ_m = scale * abs(second.zero_m - first.zero_m)
    # An honest ceiling: the two zeros scatter by their own uncertainty even when nothing drifts.
    drift_rate = differ_m / apart_s if apart_s > 0 else 0.0
    drift_u_m = drift_rate * abs(left_at_s - zero.time_s) / math.sqrt(3.0)
    residual_u_m = math.sqrt(
        (scale * zero.u_m) ** 2 + (scale * resolution_m / math.sqrt(12.0)) ** 2 + drift_u_m**2
    )
    bound_m = abs(residual_m) + accept.coverage_factor * residual_u_m
    reasons = []
    if differ_m > accept.scans_agree_m:
        reasons.append(
            f"the two scans differ by {differ_m * 1e9:.1f} nm of OPD, "
            f"more than {accept.scans_agree_m * 1e9:g} nm"
        )
    if bound_m > accept.residual_opd_m:
        reasons.append(
            f"residual OPD {residual_m * 1e9:.1f} nm with {accept.coverage_factor:g} x "
            f"{residual_u_m * 1e9:.1f} nm is not within {accept.residual_opd_m * 1e9:g} nm"
        )
    return Verdict(
        accepted=not reasons,
        reason="; ".join(reasons) or "two scans agree and the residual OPD is within its limit",
        zero_m=zero.zero_m,
        zero_u_m=zero.u_m,
        residual_opd_m=residual_m,
        residual_u_m=residual_u_m,
        scans_differ_opd_m=differ_m,
        time_s=left_at_s,
    )
