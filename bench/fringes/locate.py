"""From a scan to the zero: the one public function, and the order of its decisions."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np

from bench.fringes import results
from bench.fringes.detect import (
    ENVELOPE_FWHM,
    Candidate,
    search_band,
    search_blind,
)
from bench.fringes.lines import remove_lines
from bench.fringes.model import (
    BoolArray,
    Estimate,
    FloatArray,
    FringeZero,
    Knowledge,
    Located,
    Notice,
    Scan,
)
from bench.fringes.notices import at_the_edge, is_cut, notices_of
from bench.fringes.results import Solution
from bench.fringes.solve import solve
from bench.fringes.trend import flat_tops, lone_spikes, robust_spread, slow_level
from bench.fringes.verdict import CUT, EVERYWHERE, LINE, SLOW, judge
from bench.fringes.window import LEAST_CLEAR, Window, clear_margin, lit, settle

LEAST_READINGS = 24
DROWNED = 0.3  # of a steady line
CONSTANT = "the signal is constant"
NO_LIGHT = "no light: the detector sees only its dark level"
DARK = 2.0  # standard deviations of a reading that the dark level itself may be off
DARK_ALL = 7.0  # one of a million readings is that far off by noise and the dark level together
IN_STEP = (
    "the readings fall in step with the fringes, which fold onto themselves: "
    "scan again with another spacing of the readings"
)
SUSPICION = 0.2
SEEN = 1.8  # what the verdict asks beyond the search, by simulation: nine in ten are found


def locate(scan: Scan, knowledge: Knowledge | None = None) -> Located:
    """Find the packet of ``scan``, say where its group zero is and how sure that is.

    ``scan.x`` and ``scan.signal``: shape (n,), finite, any order and spacing. Returns ``Located``
    with ``found`` false and a reason where no packet can be told from what noise, lamps, lasers and
    mains do. Raises ValueError for arrays of different or wrong shape or with values not finite.
    """
    known = knowledge if knowledge is not None else Knowledge()
    x, signal, notices = _usable(scan)
    if x.size and float(np.ptp(signal)) == 0.0:
        return Located(found=False, reason=CONSTANT, noise=0.0, notices=tuple(notices))
    located = _locate(scan, known, x, signal, notices)
    if not located.found and _without_light(signal, scan.dark, known.noise):
        return replace(located, reason=NO_LIGHT)
    return located


def _without_light(signal: FloatArray, dark: float | None, noise: float | None) -> bool:
    """Whether all readings lie within a few standard deviations of the dark level."""
    if dark is None or not signal.size:
        return False
    # differences of neighbours tell the noise whatever the level does
    noise = noise or robust_spread(np.diff(signal)) / math.sqrt(2.0)
    level = abs(float(np.median(signal)) - dark)
    return level < DARK * noise and float(np.max(np.abs(signal - dark))) < DARK_ALL * noise


def _locate(
    scan: Scan, known: Knowledge, x: FloatArray, signal: FloatArray, notices: list[Notice]
) -> Located:
    if x.size < LEAST_READINGS or x[-1] <= x[0]:
        reason = f"only {x.size} usable readings; at least {LEAST_READINGS} are needed"
        return Located(found=False, reason=reason, notices=tuple(notices))
    # Positions in spans of the scan about its middle: sums of squares stay well scaled.
    middle, span = 0.5 * float(x[0] + x[-1]), float(x[-1] - x[0])
    u = (x - middle) / span
    per_m = abs(scan.opd_per_x) * span if scan.opd_per_x else None  # OPD in m for one unit of u
    band = None
    if known.band is not None and per_m is not None:
        band = (known.band[0] * per_m, known.band[1] * per_m)
    steady = _steady_hum(u, signal, band)
    signal = signal - steady
    candidate, flat = _candidate(u, signal, band)
    if candidate is None:
        return _refused("nothing rises above the noise like a packet", 1.0, notices, flat)
    if candidate.amplitude < DROWNED * math.sqrt(2.0) * float(np.std(steady)):
        # what taking out a far stronger line leaves behind is not trusted to be a packet
        candidate = replace(candidate, steady=True)
    if band is not None and clear_margin(u, candidate) < LEAST_CLEAR:
        notices.append(Notice("undersampled", IN_STEP))
        return _refused(IN_STEP, 1.0, notices, flat)
    window = None
    if not candidate.steady:
        window = settle(u, flat, candidate, band_known=band is not None)
    reason, false_alarm = judge(u, flat, candidate, window, band_known=band is not None)
    if reason or window is None:
        if window is not None and reason in (SLOW, EVERYWHERE) and is_cut(u, window, flat):
            reason = CUT
        if reason in (EVERYWHERE, LINE):
            notices.append(Notice("monochromatic", reason))
        weakest = _weakest_contrast(candidate, signal, scan.dark)
        return _refused(reason, false_alarm, notices, flat, weakest)
    off = np.ones(u.size, dtype=bool)
    off[window.first : window.stop] = False
    light = None
    if known.light is not None and per_m is not None:
        light = (known.light[0] * per_m, known.light[1] * per_m)
    # the foot of a broad packet reaches out of the window, and is not hum
    broad = light is not None and lit(u, flat, window, light) is not None
    hum = remove_lines(u, flat, off, light if broad else None)
    if bool(np.any(hum)):
        signal, flat = signal - hum, flat - hum
        window = settle(u, flat, candidate, band_known=band is not None) or window
    wider = None
    if band is not None and per_m is not None:
        wider = lit(u, flat, window, light)
    solution = solve(u, signal, window, known, per_m, wider)
    return _result(scan, known, u, signal, window, solution, false_alarm, notices, middle, span)


def _usable(scan: Scan) -> tuple[FloatArray, FloatArray, list[Notice]]:
    """Readings in the order of position without clipped ones and lone spikes."""
    x, signal = np.asarray(scan.x, dtype=np.float64), np.asarray(scan.signal, dtype=np.float64)
    if x.ndim != 1 or x.shape != signal.shape:
        raise ValueError(f"positions {x.shape} and signals {signal.shape} must be one row each")
    if not (bool(np.all(np.isfinite(x))) and bool(np.all(np.isfinite(signal)))):
        raise ValueError("positions and signals must be finite")
    order = np.argsort(x, kind="stable")
    x, signal = x[order], signal[order]
    clipped: BoolArray = flat_tops(signal)
    if scan.saturated is not None:
        clipped = clipped | np.asarray(scan.saturated, dtype=bool)[order]
    spikes = lone_spikes(signal) & ~clipped
    notices = []
    if bool(clipped.any()):
        text = f"{int(clipped.sum())} clipped readings were left out"
        notices.append(Notice("saturated", text))
    if bool(spikes.any()):
        notices.append(Notice("outliers", f"{int(spikes.sum())} lone spikes were left out"))
    keep = ~(clipped | spikes)
    return x[keep], signal[keep], notices


def _steady_hum(u: FloatArray, signal: FloatArray, band: tuple[float, float] | None) -> FloatArray:
    """Lines outside a known band, which would leak into it at the scan's ends."""
    if band is None:
        return np.zeros_like(signal)
    flat = signal - slow_level(u, signal, 4.0 * ENVELOPE_FWHM / (band[1] - band[0]))
    return remove_lines(u, flat, np.ones(u.size, dtype=bool), band)


def _candidate(
    u: FloatArray, signal: FloatArray, band: tuple[float, float] | None
) -> tuple[Candidate | None, FloatArray]:
    if band is None:
        flat = signal - float(np.median(signal))
        return search_blind(u, flat), flat
    flat = signal - slow_level(u, signal, 4.0 * ENVELOPE_FWHM / (band[1] - band[0]))
    plain, wide = (search_band(u, flat, band[0], band[1], stretch) for stretch in (1.0, 2.0))
    # The wider kernel sees weak packets that glass has drawn out, and is blind to lines at the
    # band's edge that the plain one sees everywhere: it may sharpen a suspicion, not raise one.
    if plain.false_alarm < SUSPICION and wide.false_alarm < plain.false_alarm:
        return wide, flat
    return plain, flat


def _result(
    scan: Scan,
    known: Knowledge,
    u: FloatArray,
    signal: FloatArray,
    window: Window,
    solution: Solution,
    false_alarm: float,
    notices: list[Notice],
    middle: float,
    span: float,
) -> Located:
    fit = solution.fit
    part = u[window.first : window.stop]
    inside = part - fit.origin
    stated = known.at_wavelength_m is not None and scan.opd_per_x is not None
    zero = results.group_zero(solution, stated=stated)
    zero, cut = at_the_edge(u, window, fit, zero)
    notices += cut
    fringe = results.fringe_zero(solution, zero)
    amplitude = results.peak_amplitude(solution.sizes, float(inside[0]), float(inside[-1]))
    level = float(np.interp(zero.value, inside, fit.level))
    contrast = results.contrast(solution.sizes, zero.value, level, scan.dark)
    notices += notices_of(u, signal, window, solution, amplitude, contrast)
    per_m = abs(scan.opd_per_x) * span if scan.opd_per_x else None
    relative = scan.opd_per_x_relative_uncertainty
    mean_wavelength = coherence = glass = at = None
    if per_m is None:
        text = "what one unit of the axis is worth in OPD is not known: no wavelengths, no lengths"
        notices.append(Notice("no-length", text))
    else:
        mean_wavelength = results.mean_wavelength(solution, per_m, relative)
        coherence = results.coherence(solution.sizes, per_m, relative)
        glass = results.residual_glass(solution, math.copysign(1.0, scan.opd_per_x or 1.0))
        at = mean_wavelength
        if known.at_wavelength_m is not None:
            at = Estimate(known.at_wavelength_m, 0.0)
    on_axis = _on_axis(zero, fit.origin, middle, span)
    if stated and known.at_wavelength_m is not None and scan.opd_per_x is not None:
        share = results.scale_share(glass, known.at_wavelength_m, relative, scan.opd_per_x)
        on_axis = Estimate(on_axis.value, math.hypot(on_axis.standard_uncertainty, share))
    return Located(
        found=True,
        zero=on_axis,
        at_wavelength_m=at,
        fringe_zero=None
        if fringe is None
        else FringeZero(
            _on_axis(fringe.x, fit.origin, middle, span), fringe.kind, fringe.probability
        ),
        contrast=contrast,
        amplitude=amplitude,
        mean_wavelength_m=mean_wavelength,
        coherence=coherence,
        residual_glass=glass,
        noise=math.sqrt(float(np.sum(fit.residual**2)) / max(1, fit.freedom)),
        degrees_of_freedom=float(fit.freedom),
        false_alarm_probability=false_alarm,
        notices=tuple(notices),
        picture=results.picture(fit, inside, middle, span),
    )


def _on_axis(estimate: Estimate, origin: float, middle: float, span: float) -> Estimate:
    return Estimate(middle + span * (origin + estimate.value), span * estimate.standard_uncertainty)


def _weakest_contrast(candidate: Candidate, signal: FloatArray, dark: float | None) -> float | None:
    """Contrast that would have been found at this place nine times in ten; None without a dark."""
    level = float(np.median(signal))
    if dark is None or level <= dark or not math.isfinite(candidate.usual_amplitude):
        return None
    needed = math.sqrt(math.log(4.0 * candidate.places / 1e-3)) + 1.3
    return SEEN * candidate.usual_amplitude * needed / (level - dark)


def _refused(
    reason: str,
    false_alarm: float,
    notices: list[Notice],
    flat: FloatArray,
    weakest: float | None = None,
) -> Located:
    return Located(
        found=False,
        reason=reason,
        # of endless fringes the spread is the fringes' own: it says nothing of the noise
        noise=math.nan if reason in (EVERYWHERE, LINE, IN_STEP) else robust_spread(flat),
        false_alarm_probability=false_alarm,
        weakest_contrast=weakest,
        notices=tuple(notices),
    )
