"""From a scan to the zero: the one public function, and the order of its decisions."""

from __future__ import annotations

import numpy as np

from bench.fringes import results
from bench.fringes.detect import ACCEPT, ENVELOPE_FWHM, Candidate, search_band, search_blind
from bench.fringes.honesty import noise_shares
from bench.fringes.model import FloatArray, Knowledge, Located, Notice, Scan
from bench.fringes.trend import flat_tops, lone_spikes, robust_spread, slow_level
from bench.fringes.window import Window, settle
from bench.fringes.zero import PacketFit, Shape, fit_packet, square_law

LEAST_READINGS = 24
BEND_PRIOR_RAD = 6.0
EVERYWHERE = "fringes everywhere, no packet"


def locate(scan: Scan, knowledge: Knowledge | None = None) -> Located:
    """Find the packet of ``scan``, say where its group zero is and how sure that is.

    ``scan.x`` and ``scan.signal``: shape (n,), finite, any order and spacing. Returns ``Located``
    with ``found`` false and a reason where no packet can be told from what noise, lamps, lasers and
    mains do. Raises ValueError for arrays of different or wrong shape or with values not finite.
    """
    known = knowledge if knowledge is not None else Knowledge()
    x, signal = np.asarray(scan.x, dtype=np.float64), np.asarray(scan.signal, dtype=np.float64)
    if x.ndim != 1 or x.shape != signal.shape:
        raise ValueError(f"positions {x.shape} and signals {signal.shape} must be one row each")
    if not (bool(np.all(np.isfinite(x))) and bool(np.all(np.isfinite(signal)))):
        raise ValueError("positions and signals must be finite")
    order = np.argsort(x, kind="stable")
    x, signal = x[order], signal[order]
    notices: list[Notice] = []
    clipped = flat_tops(signal)
    if scan.saturated is not None:
        clipped = clipped | np.asarray(scan.saturated, dtype=bool)[order]
    spikes = lone_spikes(signal) & ~clipped
    if bool(clipped.any()):
        notices.append(Notice("saturated", f"{int(clipped.sum())} clipped readings were left out"))
    if bool(spikes.any()):
        notices.append(Notice("outliers", f"{int(spikes.sum())} lone spikes were left out"))
    keep = ~(clipped | spikes)
    x, signal = x[keep], signal[keep]
    if x.size < LEAST_READINGS or x[-1] <= x[0]:
        return _refused(
            f"only {x.size} usable readings; at least {LEAST_READINGS} are needed", notices
        )
    # Positions in spans of the scan about its middle: sums of squares stay well scaled.
    middle, span = 0.5 * float(x[0] + x[-1]), float(x[-1] - x[0])
    u = (x - middle) / span
    per_m = abs(scan.opd_per_x) * span if scan.opd_per_x else None  # OPD in m for one unit of u
    band = None
    if known.band is not None and per_m is not None:
        band = (known.band[0] * per_m, known.band[1] * per_m)
    candidate, flattened = _candidate(u, signal, band)
    if candidate is None:
        return _refused("nothing rises above the noise like a packet", notices)
    window = settle(u, flattened, candidate, band_known=band is not None)
    verdict = _verdict(u, flattened, candidate, window)
    if verdict or window is None:
        reason = verdict or "too few readings on the packet"
        if reason.startswith(EVERYWHERE):
            notices.append(Notice("monochromatic", EVERYWHERE))
        return _refused(reason, notices, candidate, flattened)
    fit = _fit(u, signal, window, known, per_m, float(np.sign(scan.opd_per_x or 1.0)))
    return results.build(
        scan, known, u, signal, window, fit, candidate, notices, middle=middle, span=span
    )


def _candidate(
    u: FloatArray, signal: FloatArray, band: tuple[float, float] | None
) -> tuple[Candidate | None, FloatArray]:
    if band is None:
        flat = signal - float(np.median(signal))
        return search_blind(u, flat), flat
    flat = signal - slow_level(u, signal, 4.0 * ENVELOPE_FWHM / (band[1] - band[0]))
    tries = [search_band(u, flat, band[0], band[1], stretch) for stretch in (1.0, 2.0)]
    return min(tries, key=lambda found: (found.false_alarm, -found.excess)), flat


def _verdict(u: FloatArray, flat: FloatArray, candidate: Candidate, window: Window | None) -> str:
    """Why this is no packet; empty where it is one."""
    if window is None:
        return "too few readings on the packet"
    part = flat[window.first : window.stop]
    fit = window.fit
    unknowns = 2 * fit.frequency.size
    left = float(np.sum(fit.residual**2))
    level_only = float(np.sum((part - fit.level) ** 2))
    explained = max(level_only - left, 0.0) / unknowns
    unexplained = left / max(1, fit.freedom)
    strength = explained / max(unexplained, 1e-300)
    few_places = candidate.places < 12.0
    if strength < 1.0 + 6.0 * np.sqrt(2.0 / unknowns):
        return "nothing rises above the noise like a packet"
    ends = envelope_at_ends(u, window)
    if candidate.false_alarm > ACCEPT and not few_places:
        return EVERYWHERE
    if min(ends) > 0.6:
        return EVERYWHERE
    return ""


def envelope_at_ends(u: FloatArray, window: Window) -> tuple[float, float]:
    """The envelope at both ends of the window over its maximum."""
    from bench.fringes.zero import envelope_of

    fit = window.fit
    inside = u[window.first : window.stop] - fit.origin
    fine = np.linspace(inside[0], inside[-1], 8 * fit.frequency.size + 1)
    size = np.abs(envelope_of(fit, fine))
    edge = max(2, size.size // 12)
    top = max(float(size.max()), 1e-300)
    return float(size[:edge].mean()) / top, float(size[-edge:].mean()) / top


def _fit(
    u: FloatArray,
    signal: FloatArray,
    window: Window,
    known: Knowledge,
    per_m: float | None,
    sign: float,
) -> PacketFit:
    """The nonlinear fit, twice: with equal weights, then with those that its residuals ask for."""
    part, values = u[window.first : window.stop], signal[window.first : window.stop]
    start = window.fit
    power = np.abs(start.c) ** 2
    mean = float(np.sum(np.abs(start.c) * start.frequency) / np.sum(np.abs(start.c)))
    reference = mean
    if known.at_wavelength_m is not None and per_m is not None:
        reference = per_m / known.at_wavelength_m
    spread = float(np.sqrt(np.sum(power * (start.frequency - mean) ** 2) / np.sum(power)))
    spread = max(spread, 1e-3 * mean)
    shape: Shape = square_law(spread)
    weight = np.ones(part.size)
    fit: PacketFit | None = None
    for _ in range(3):
        origins = [(window.peak - start.origin, 0.0)] if fit is None else [(fit.shift, fit.bend)]
        fit = min(
            (
                fit_packet(part, values, weight, start, reference, shape, BEND_PRIOR_RAD, *origin)
                for origin in origins
            ),
            key=lambda done: float(np.sum(weight * done.residual**2)),
        )
        shares = noise_shares(fit.residual, fit.leverage, fit.slope, fit.fringes)
        variance = shares.variance(fit.slope, fit.fringes)
        weight = 1.0 / np.maximum(variance, 1e-3 * float(np.mean(variance)))
        weight = weight / float(np.mean(weight))
    assert fit is not None
    return fit


def _refused(
    reason: str,
    notices: list[Notice],
    candidate: Candidate | None = None,
    flat: FloatArray | None = None,
) -> Located:
    noise = robust_spread(flat) if flat is not None else float("nan")
    return Located(
        found=False,
        reason=reason,
        noise=noise,
        false_alarm_probability=candidate.false_alarm if candidate is not None else 1.0,
        notices=tuple(notices),
    )
