"""What a person should know about a zero before trusting it: the warnings of a located packet."""

from __future__ import annotations

import math

import numpy as np

from bench.fringes.detect import search_band
from bench.fringes.model import Estimate, FloatArray, Notice
from bench.fringes.results import Solution
from bench.fringes.verdict import carried_by_few
from bench.fringes.window import Window
from bench.fringes.zero import PacketFit

NEAR_END = 1.1  # of the envelope's full width: nearer to the scan's end than this is cut
LOST = 0.4  # nearer than this, the maximum itself may lie outside
QUIET = 0.3  # of the spread in the window, elsewhere: fringes that are not everywhere
QUIET_READINGS = 24
SECOND = 0.15  # of the first packet's amplitude


def at_the_edge(
    u: FloatArray, window: Window, fit: PacketFit, zero: Estimate
) -> tuple[Estimate, list[Notice]]:
    """The zero with what a cut packet adds to its uncertainty.

    Half of a packet still shows its middle if the spectrum's phase is smooth, but less surely than
    the noise alone says; where the maximum is at the very end it may lie beyond, and the envelope's
    width is all that is known.
    """
    place = fit.origin + zero.value
    width = window.width
    astray = abs(place - window.sought)
    if astray > width:
        # the fit and the search saw different things: neither is trusted to better than that
        zero = Estimate(zero.value, math.hypot(zero.standard_uncertainty, astray))
    near = _to_end(u, window)
    if near > NEAR_END:
        return zero, []
    text = "the packet is cut by the end of the scan; scan on past it"
    if near < LOST:
        wide = max(width, zero.standard_uncertainty)
        return Estimate(window.peak - fit.origin, wide), [Notice("edge", text)]
    apart = abs(place - window.peak)
    if apart > 0.25 * width:
        # the fit ran off along what half a packet leaves open; the envelope's maximum did not
        return Estimate(window.peak - fit.origin, 0.25 * width), [Notice("edge", text)]
    more = math.hypot(0.05 * width * (NEAR_END - near), 0.5 * apart)
    return Estimate(zero.value, math.hypot(zero.standard_uncertainty, more)), [Notice("edge", text)]


def is_cut(u: FloatArray, window: Window, flat: FloatArray) -> bool:
    """Whether the scan ends before the packet of the window does, and is quiet elsewhere."""
    outside = np.concatenate([flat[: window.first], flat[window.stop :]])
    if _to_end(u, window) > NEAR_END or outside.size < QUIET_READINGS:
        return False
    return float(np.std(outside)) < QUIET * float(np.std(flat[window.first : window.stop]))


def _to_end(u: FloatArray, window: Window) -> float:
    """From the envelope's maximum to the nearer end of the scan, in its full widths."""
    return min(window.peak - float(u[0]), float(u[-1]) - window.peak) / window.width


def notices_of(
    u: FloatArray,
    signal: FloatArray,
    window: Window,
    solution: Solution,
    amplitude: Estimate,
    contrast: Estimate | None,
) -> list[Notice]:
    """Warnings about sampling, noise, drift, contrast and a second packet."""
    fit, shares = solution.fit, solution.shares
    found: list[Notice] = []
    mean, _ = solution.mean_frequency()
    step = float(u[-1] - u[0]) / max(1, u.size - 1)
    per_fringe = 1.0 / (mean * step)
    if per_fringe < 2.2:
        text = f"{per_fringe:.2g} readings a fringe: the fringes are known by the source's band"
        found.append(Notice("undersampled", text))
    slope_rms = math.sqrt(float(np.mean(fit.slope**2)))
    by_position = shares.position * slope_rms
    if solution.ruled or by_position > 2.0 * math.hypot(shares.detector, 1e-3 * amplitude.value):
        share = shares.position * mean
        text = f"readings scatter as if positions did, by {share:.2g} of a fringe"
        found.append(Notice("position-noise", text))
    if contrast is not None and contrast.value < 0.02:
        found.append(Notice("low-contrast", f"contrast is only {contrast.value:.2g}"))
    drift = abs(float(np.median(signal[: u.size // 4])) - float(np.median(signal[-u.size // 4 :])))
    if drift > 0.5 * amplitude.value:
        found.append(Notice("drift", "the mean level changes by half the fringe amplitude"))
    second = _second_packet(u, signal, window, fit)
    if second is not None and second > SECOND * amplitude.value:
        text = f"another packet with {second / amplitude.value:.0%} of the amplitude is in the scan"
        found.append(Notice("second-packet", text))
    return found


def _second_packet(
    u: FloatArray, signal: FloatArray, window: Window, fit: PacketFit
) -> float | None:
    """Amplitude of the strongest packet outside the window, None where none stands out."""
    amplitude = np.maximum(fit.amplitude, 0.0)
    strong = fit.frequency[amplitude >= 0.5 * float(amplitude.max())]
    step = float(fit.frequency[1] - fit.frequency[0])
    low, high = float(strong[0]) - 0.5 * step, float(strong[-1]) + 0.5 * step
    best = None
    for side in (slice(0, window.first), slice(window.stop, u.size)):
        x, y = u[side], signal[side]
        if x.size < 48 or float(x[-1] - x[0]) < 3.0 * window.width:
            continue
        smooth = np.interp(
            x, [x[0], x[-1]], [np.median(y[: x.size // 2]), np.median(y[x.size // 2 :])]
        )
        seen = search_band(x, y - smooth, low, high)
        inner = min(abs(seen.x - u[window.first]), abs(seen.x - u[window.stop - 1]))
        spiky = carried_by_few(x, y - smooth, seen.x, seen.width)
        if seen.false_alarm < 1e-3 and inner > window.width and not spiky:
            best = max(best or 0.0, seen.amplitude)
    return best
