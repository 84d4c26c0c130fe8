"""The stretch of a scan that the fit uses: around the packet, wide enough, and no wider."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from bench.fringes.detect import ENVELOPE_FWHM, Candidate
from bench.fringes.model import FloatArray
from bench.fringes.spectrum import band_grid, fourier_sum
from bench.fringes.zero import LinearFit, envelope_of, fit_linear

WIDEST = 4.0  # envelopes: more than glass draws a packet out to, and still be seen
REACH = 2.6  # half a window over the envelope's full width at half maximum
MOST_UNKNOWNS = 160
LEAST_CLEAR = 1.2
DARKEST = 0.45  # of the band's middle, and its inverse: how far light beyond it is looked for
LIT = 6.0  # of the noise's power: seven in a thousand of noise's are above it
SEARCHED = 4.0  # readings a fringe from which on light beyond the band is looked for
FINEST = 0.75  # frequencies' spacing times the window: finer is undetermined
DIM = 2e-4  # of the strongest power
MARGINS = (1.25, 0.9, 0.65)  # of the half-power band to either side: where a Gaussian is at 1.3 %


@dataclass(frozen=True)
class Window:
    """Readings ``first`` to ``stop`` of the sorted scan with the free-spectrum fit of them.

    ``peak`` and ``width`` are of the fitted envelope, ``sought`` is where the search saw it.
    """

    first: int
    stop: int
    peak: float
    width: float
    low: float
    high: float
    fit: LinearFit
    sought: float


def full_width(u: FloatArray, envelope: FloatArray) -> tuple[float, float]:
    """Place of the maximum and full width at half of it, of a sampled envelope (m,)."""
    top = int(np.argmax(envelope))
    half = 0.5 * envelope[top]
    below = np.nonzero(envelope < half)[0]
    left = below[below < top]
    right = below[below > top]
    step = float(u[1] - u[0])
    start = float(u[left[-1]]) if left.size else float(u[0])
    end = float(u[right[0]]) if right.size else float(u[-1])
    place = float(u[top])
    if 0 < top < envelope.size - 1:
        a, b, c = envelope[top - 1 : top + 2]
        bend = a - 2.0 * b + c
        if bend < 0.0:
            place += 0.5 * step * float((a - c) / bend)
    return place, max(end - start, step)


def clear_margin(x: FloatArray, candidate: Candidate) -> float:
    """How far the band may be widened before it folds onto itself, in half-power widths.

    Readings in step with the fringes cannot tell a frequency f from its mirror: the two meet where
    the readings' own transform at 2 f is large. Widening is to either side of the band's middle;
    ``MARGINS[0]`` where nothing folds. Uneven readings do not fold.
    """
    middle, size = 0.5 * (candidate.low + candidate.high), candidate.high - candidate.low
    reach = REACH * ENVELOPE_FWHM / size
    place = x[(x > candidate.x - reach) & (x < candidate.x + reach)]
    if place.size < 8:
        return MARGINS[0]
    away = _folded(place, middle, -MARGINS[0] * size, MARGINS[0] * size) / size
    return float(np.abs(away).min()) if away.size else MARGINS[0]


def _folded(place: FloatArray, middle: float, below: float, above: float) -> FloatArray:
    """Distances from ``middle``, between the two given, that readings there cannot tell apart."""
    span = float(place[-1] - place[0])
    away = np.linspace(below, above, int(np.ceil((above - below) * span * 4.0)) + 3)
    together = np.abs(fourier_sum(place, np.ones(place.size), 2.0 * (middle + away))) / place.size
    return np.asarray(away[together > 0.6], dtype=np.float64)


def settle(
    x: FloatArray, signal: FloatArray, candidate: Candidate, *, band_known: bool
) -> Window | None:
    """As ``_settle``, with less of the band's wings where the scan's end leaves few readings."""
    clear = clear_margin(x, candidate) if band_known else MARGINS[0]
    for margin in (min(clear, wide) for wide in (MARGINS if band_known else MARGINS[:1])):
        window = _settle(x, signal, candidate, margin, band_known=band_known)
        if window is not None:
            return window
    return None


def _settle(
    x: FloatArray, signal: FloatArray, candidate: Candidate, margin: float, *, band_known: bool
) -> Window | None:
    """Centre and size the window on the packet; None where too few readings are left for it.

    ``x`` rising. With ``band_known`` the analysed band is the half-power band, its full width
    times ``margin`` to either side of its middle; else it is measured.
    """
    span = float(x[-1] - x[0])
    if band_known:
        middle, size = 0.5 * (candidate.low + candidate.high), candidate.high - candidate.low
        low, high = max(middle - margin * size, 0.1 * middle), middle + margin * size
        width = ENVELOPE_FWHM / size
    else:
        width = candidate.width
        middle = 0.5 * (candidate.low + candidate.high)
        low, high = _around(middle, 5.0 / width)
    # dispersion only widens: nothing is narrower than the band allows
    narrowest, widest = (0.95 * width, WIDEST * width) if band_known else (0.0, span)
    centre = candidate.x
    result: Window | None = None
    for turn in range(5):
        reach = min(REACH * width, span)
        first = int(np.searchsorted(x, centre - reach))
        stop = int(np.searchsorted(x, centre + reach, side="right"))
        frequency = band_grid(low, high, 2.0 * reach)
        if frequency.size > MOST_UNKNOWNS or stop - first < 2 * frequency.size + 6:
            # too few readings for the spectrum asked for: a smaller window has fewer unknowns
            if stop - first < 24 or width <= ENVELOPE_FWHM / max(high - low, 1e-300):
                return result
            width *= 0.7
            continue
        part = x[first:stop]
        fit = fit_linear(part, signal[first:stop], centre, frequency, np.ones(stop - first))
        left, right = float(part[0]) - centre, float(part[-1]) - centre
        if band_known or first == 0 or stop == x.size:
            # what the readings leave undetermined can ring anywhere: stay with the correlation
            left = max(left, candidate.x - centre - 1.2 * width)
            right = min(right, candidate.x - centre + 1.2 * width)
        if right - left < 0.2 * width:
            return result
        fine = np.linspace(left, right, 8 * frequency.size + 1)
        peak, seen = full_width(fine, np.abs(envelope_of(fit, fine)))
        seen = min(max(seen, narrowest), widest)
        result = Window(first, stop, centre + peak, seen, low, high, fit, candidate.x)
        moved = abs(peak) > 0.25 * seen
        resized = not 0.7 < seen / width < 1.4
        if not band_known:
            seen_low, seen_high = measured_band(fit)
            step = float(frequency[1] - frequency[0])
            open_ended = seen_low <= frequency[0] or seen_high >= frequency[-1]
            resized = resized or open_ended or seen_low > low + step or seen_high < high - step
            if open_ended:
                seen_low, seen_high = _around(
                    0.5 * (seen_low + seen_high), 1.0 * (seen_high - seen_low)
                )
            low, high = seen_low, seen_high
        if not (moved or resized) and turn > 0:
            break
        centre += peak
        width = seen if resized else width
        if band_known:
            width = max(width, ENVELOPE_FWHM / (2.5 * (candidate.high - candidate.low)))
    return result


def lit(
    x: FloatArray, signal: FloatArray, window: Window, light: tuple[float, float] | None
) -> Window | None:
    """The window with its band widened to wherever else there may be light; None where nowhere.

    A lamp between hard edges may have half of its light beyond its half-power points. Left out of
    the fit, glass turns that light into a shift of the zero. ``x`` rising. ``light`` is where
    the source has any; where it is not known it is looked for, in finely sampled fringes only, as
    far as the band does not fold onto itself.
    """
    part, values = x[window.first : window.stop], signal[window.first : window.stop]
    middle = 0.5 * (window.low + window.high)
    per_fringe = (part.size - 1) / float(part[-1] - part[0]) / middle
    if light is None and per_fringe < SEARCHED:
        return None
    low, high = light or (DARKEST * middle, middle / DARKEST)
    away = _folded(part, middle, min(low - middle, -1e-9), max(high - middle, 1e-9))
    low = min(window.low, max(low, middle + float(np.max(away[away < 0.0], initial=-middle))))
    high = max(window.high, min(high, middle + float(np.min(away[away > 0.0], initial=high))))
    centre, unlit = window.fit.origin, window.fit.frequency
    # as many frequencies as the readings can hold apart from each other, and no more
    most = min(MOST_UNKNOWNS, int(part.size / 2.5) - 3)
    span = float(part[-1] - part[0])
    step = max(float(unlit[1] - unlit[0]), FINEST / span, (high - low) / max(most, 1))
    inner = int((unlit[-1] - unlit[0]) / step) + 1
    below, above = int((unlit[0] - low) / step), max(0, int((high - unlit[-1]) / step))
    if inner < 4 or below + above <= 0:
        return None
    count = below + inner + above
    away = step * (np.arange(count, dtype=np.float64) - below)
    frequency = np.asarray(float(unlit[0]) + away, dtype=np.float64)
    first, last = (
        (0, count - 1) if light else _bright(part, values, centre, frequency, below, inner)
    )
    if first == below and last == below + inner - 1:
        return None
    kept = frequency[first : last + 1]
    # nothing is much brighter than what was seen within the band
    size = float(np.abs(window.fit.c).max()) * step / float(unlit[1] - unlit[0])
    fit = fit_linear(part, values, centre, kept, np.ones(part.size), size)
    return replace(window, low=float(kept[0]), high=float(kept[-1]), fit=fit)


def _bright(
    part: FloatArray,
    values: FloatArray,
    origin: float,
    frequency: FloatArray,
    below: int,
    inner: int,
) -> tuple[int, int]:
    """First and last of the frequencies with light, at least the ``inner`` ones from ``below``."""
    wide = fit_linear(part, values, origin, frequency, np.ones(part.size))
    power = np.abs(wide.c) ** 2
    noise = 4.0 * float(np.sum(wide.residual**2)) / max(1, wide.freedom) / part.size
    over = power > np.maximum(LIT * noise, DIM * float(power.max()))
    first, last = below, below + inner - 1
    # two frequencies in three: a lamp's curve has no gaps, and one of noise is no light
    while first > 0 and int(over[max(0, first - 3) : first].sum()) >= 2:
        first -= 1
    while last < frequency.size - 1 and int(over[last + 1 : last + 4].sum()) >= 2:
        last += 1
    if first < below:
        first = max(0, first - 1)
    if last > below + inner - 1:
        last = min(frequency.size - 1, last + 1)
    return first, last


def _around(middle: float, half: float) -> tuple[float, float]:
    """A band about ``middle`` that stays clear of the slow level."""
    return max(0.3 * middle, middle - half), min(2.5 * middle, middle + half)


def measured_band(fit: LinearFit, share: float = 0.02) -> tuple[float, float]:
    """Frequencies around the strongest one where the power stays above ``share`` of it and noise.

    A gap of up to two grid points is bridged: spectra with two lobes are one source.
    """
    power = np.abs(fit.c) ** 2
    noise = 4.0 * np.sum(fit.residual**2) / max(1, fit.freedom) / max(1, fit.residual.size)
    limit = max(share * float(power.max()), 4.0 * float(noise))
    over = power > limit
    top = int(np.argmax(power * fit.frequency**2))
    left = right = top
    while left > 0 and bool(np.any(over[max(0, left - 3) : left])):
        left -= 1
    while right < power.size - 1 and bool(np.any(over[right + 1 : right + 4])):
        right += 1
    step = float(fit.frequency[1] - fit.frequency[0])
    return (
        max(float(fit.frequency[left]) - step, 0.5 * step),
        float(fit.frequency[right]) + step,
    )
