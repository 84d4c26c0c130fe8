"""From two located zeros and the place where the stage was left to a verdict. Pure."""

from __future__ import annotations

import math
from dataclasses import dataclass

from bench.spec.model import AcceptSpec

__all__ = ["Verdict", "ZeroFound", "combine", "judge"]


@dataclass(frozen=True)
class ZeroFound:
    """A zero as one scan saw it: stage reading and its standard uncertainty, at a bench time.

    ``common_u_m`` is the part of ``u_m`` that every scan of this bench shares, such as that of the
    axis' scale: no number of scans makes it smaller.
    """

    scan: str
    zero_m: float
    u_m: float
    time_s: float
    common_u_m: float = 0.0

    @property
    def own_u_m(self) -> float:
        """The part that is this scan's own; never quite nothing."""
        own = math.sqrt(max(self.u_m - self.common_u_m, 0.0)) * math.sqrt(
            self.u_m + self.common_u_m
        )
        return max(own, 1e-3 * self.u_m)


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
    Raises ValueError for a value that is not finite or an uncertainty that is not positive.
    """
    for found in (first, second):
        whose = f"the scan {found.scan!r}"
        _refuse_not_finite(whose, found.zero_m, found.u_m, found.time_s, found.common_u_m)
        if not found.u_m > 0.0:
            raise ValueError(f"{whose}: uncertainty {found.u_m} m is not positive")
        if not found.common_u_m >= 0.0:
            raise ValueError(f"{whose}: its common part {found.common_u_m} m is negative")
    # Written with ratios, because squares of the uncertainties can overflow or vanish.
    own_1_m, own_2_m = first.own_u_m, second.own_u_m
    common_u_m = max(first.common_u_m, second.common_u_m)
    apart_u_m = math.hypot(own_1_m, own_2_m)
    share_1, share_2 = (own_2_m / apart_u_m) ** 2, (own_1_m / apart_u_m) ** 2
    birge = max(1.0, abs(first.zero_m - second.zero_m) / apart_u_m)
    zero_m = share_1 * first.zero_m + share_2 * second.zero_m
    u_m = math.hypot(own_1_m * (own_2_m / apart_u_m) * birge, common_u_m)
    _refuse_not_finite(f"the scans {first.scan!r} and {second.scan!r} together", zero_m, u_m)
    if not u_m > 0.0:
        raise ValueError(f"the scans {first.scan!r} and {second.scan!r}: no uncertainty is left")
    return ZeroFound(
        scan=f"{first.scan}, {second.scan}",
        zero_m=zero_m,
        u_m=u_m,
        time_s=share_1 * first.time_s + share_2 * second.time_s,
        common_u_m=common_u_m,
    )


def _refuse_not_finite(whose: str, *values: float) -> None:
    for value in values:
        if not math.isfinite(value):
            raise ValueError(f"{whose}: {value} is not a finite number")


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
    two scans saw it. Raises ValueError for a value that is not finite, or an uncertainty, a
    coverage factor or a path factor that cannot be: none of them may end as an acceptance.
    """
    _refuse_not_finite("the place where the stage was left", left_at_m, left_at_s)
    _refuse_not_finite("the bench", opd_per_m, resolution_m, accept.coverage_factor)
    if not (abs(opd_per_m) > 0.0 and resolution_m >= 0.0 and accept.coverage_factor > 0.0):
        raise ValueError(
            f"{opd_per_m} of OPD for a unit of reading, resolution {resolution_m} m, coverage "
            f"factor {accept.coverage_factor}: nothing can be judged with these"
        )
    zero = combine(first, second)
    scale = abs(opd_per_m)
    residual_m = opd_per_m * (left_at_m - zero.zero_m)
    apart_s = abs(second.time_s - first.time_s)
    differ_m = scale * abs(second.zero_m - first.zero_m)
    # An honest ceiling: the two zeros scatter by their own uncertainty even when nothing drifts.
    drift_rate = differ_m / apart_s if apart_s > 0 else 0.0
    drift_u_m = drift_rate * abs(left_at_s - zero.time_s) / math.sqrt(3.0)
    residual_u_m = math.hypot(scale * zero.u_m, scale * resolution_m / math.sqrt(12.0), drift_u_m)
    bound_m = abs(residual_m) + accept.coverage_factor * residual_u_m
    reasons = []
    # Written so that a limit or a bound that is not a number rejects.
    if not differ_m <= accept.scans_agree_m:
        reasons.append(
            f"the two scans differ by {differ_m * 1e9:.1f} nm of OPD, "
            f"more than {accept.scans_agree_m * 1e9:g} nm"
        )
    if not bound_m <= accept.residual_opd_m:
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
