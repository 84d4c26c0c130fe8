"""Is what was found a packet? The tests that a lamp, a laser, the mains or a spike fail."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np

from bench.fringes.detect import ACCEPT, ENVELOPE_FWHM, FLOOR_KNOWN, Candidate
from bench.fringes.model import FloatArray
from bench.fringes.spectrum import band_grid, polynomial
from bench.fringes.window import Window
from bench.fringes.zero import LinearFit, envelope_of, fit_linear

EVERYWHERE = "fringes everywhere, no packet"
NOTHING = "nothing rises above the noise like a packet"
STEP = "the signal jumps there: a step, not a packet"
SLOW = "the signal wanders there without fringes of its own: no packet"
CUT = "what may be a packet is cut by the end of the scan: scan on past it"
LINE = "the fringes there are a line's, not the source's: no packet"
FEW_PLACES = 10.0
STRENGTH = 1e-2  # beside the search, whose own false alarms are fewer than ACCEPT
FEW_READINGS = 3.0
LONG_WINDOW = 200  # readings
CLEAR_OF_NOISE = 1.5  # by simulation: most bursts of noise stay below, few packets do
LONGEST = 3.5
FLATTEST = 0.55  # rms of the band analysed evenly: 0.72; of any source within its band: 0.5


def f_tail(ratio: float, above: float, below: float) -> float:
    """P(F > ratio) of Fisher's distribution, degrees ``above`` and ``below``.

    Paulson's normal approximation by cube roots (Paulson 1942, from memory), good to a few percent
    of the tail's logarithm where both degrees exceed four.
    """
    if ratio <= 0.0:
        return 1.0
    root = ratio ** (1.0 / 3.0)
    a, b = 2.0 / (9.0 * above), 2.0 / (9.0 * below)
    z = ((1.0 - b) * root - (1.0 - a)) / math.sqrt(b * root**2 + a)
    return 0.5 * math.erfc(z / math.sqrt(2.0))


def strength(values: FloatArray, fit: LinearFit) -> tuple[float, float]:
    """Energy of the band over that outside it (an F ratio), and the chance of it in white noise."""
    unknowns = 2 * fit.frequency.size
    left = float(np.sum(fit.residual**2))
    smooth = polynomial(np.arange(values.size, dtype=np.float64), 2)
    rest = values - smooth @ np.linalg.lstsq(smooth, values, rcond=None)[0]
    explained = max(float(np.sum(rest**2)) - left, 0.0) / unknowns
    freedom = max(1, fit.freedom)
    ratio = explained / max(left / freedom, 1e-300)
    return ratio, f_tail(ratio, unknowns, freedom)


def is_step(part: FloatArray, values: FloatArray, residual_energy: float) -> bool:
    """Whether a jump on a quadratic level explains the window about as well as fringes do."""
    smooth = np.linalg.qr(polynomial(part, 2))[0]
    rest = values - smooth @ (smooth.T @ values)
    cuts = np.unique(np.linspace(3, part.size - 3, min(part.size - 6, 240)).astype(np.int64))
    jumps = (np.arange(part.size)[:, None] >= cuts[None, :]).astype(np.float64)
    jumps -= smooth @ (smooth.T @ jumps)
    gain = (rest @ jumps) ** 2 / np.maximum(np.sum(jumps**2, axis=0), 1e-9)
    total = float(np.sum(rest**2))
    left = total - float(gain.max())
    return left < 0.3 * total or (left < 0.7 * total and left < 1.3 * residual_energy)


def carried_by_few(part: FloatArray, values: FloatArray, place: float, width: float) -> bool:
    """Whether a few readings hold the energy under a packet's envelope.

    Their number is (sum e)^2 / sum e^2 over the readings' energies e: half the readings within the
    packet's width where fringes fill it, a handful at most for spikes.
    """
    kernel = np.exp(-4.0 * np.log(2.0) * ((part - place) / width) ** 2)
    energy = (values * kernel) ** 2
    return float(np.sum(energy)) ** 2 < FEW_READINGS * float(np.sum(energy**2))


def is_burst(part: FloatArray, values: FloatArray, fit: LinearFit, window: Window) -> bool:
    """Whether the band's energy is no more than a stretch of strong noise brings with it.

    The noise is taken from short stretches of the residuals, and what is noisy weighs little.
    """
    if part.size < LONG_WINDOW:
        # too few for a profile of the noise: noise that strong leaves most of itself unexplained
        fringes = values - fit.level - fit.residual
        near = np.abs(part - window.peak) < 0.6 * window.width
        left = float(np.sum(fit.residual[near] ** 2))
        return float(np.sum(fringes[near] ** 2)) < CLEAR_OF_NOISE * left
    size = part.size // 24
    square = np.convolve(fit.residual**2, np.full(size, 1.0 / size), mode="same")
    weight = 1.0 / np.maximum(square, 0.02 * float(np.mean(square)))
    again = fit_linear(part, values, fit.origin, fit.frequency, weight)
    root = np.sqrt(weight)
    scaled = replace(again, residual=again.residual * root)
    _, chance = strength((values - again.level) * root, scaled)
    return chance > ACCEPT


def ends_over_top(part: FloatArray, fit: LinearFit) -> tuple[float, float]:
    """The envelope at both ends of the window over its maximum."""
    inside = part - fit.origin
    size = np.abs(envelope_of(fit, np.linspace(inside[0], inside[-1], 8 * fit.frequency.size + 1)))
    edge = max(2, size.size // 12)
    top = max(float(size.max()), 1e-300)
    return float(size[:edge].mean()) / top, float(size[-edge:].mean()) / top


def is_line(fit: LinearFit, candidate: Candidate, width: float) -> bool:
    """Whether the fringes are far purer, or far longer, than the source's band can make them.

    Glass lengthens a packet but leaves its spectrum as wide as it was.
    """
    power = np.abs(fit.c) ** 2
    mean = float(np.sum(power * fit.frequency) / np.sum(power))
    rms = float(np.sqrt(np.sum(power * (fit.frequency - mean) ** 2) / np.sum(power)))
    size = candidate.high - candidate.low
    return rms < 0.12 * size or width > LONGEST * ENVELOPE_FWHM / size


def is_flat(fit: LinearFit, candidate: Candidate) -> bool:
    """Whether the energy fills the analysed band evenly, as noise does, not as the source does."""
    noise = 4.0 * float(np.sum(fit.residual**2)) / max(1, fit.freedom) / max(1, fit.residual.size)
    power = np.maximum(np.abs(fit.c) ** 2 - noise, 0.0)
    total = max(float(np.sum(power)), 1e-300)
    mean = float(np.sum(power * fit.frequency)) / total
    rms = float(np.sqrt(np.sum(power * (fit.frequency - mean) ** 2) / total))
    return rms > FLATTEST * (candidate.high - candidate.low)


def is_slow(fit: LinearFit, width: float) -> bool:
    """Whether the spectrum only falls from low frequencies, or holds less than a fringe and a half.

    A bump in a lamp's level does; the fringes of any source have a lowest frequency.
    """
    size = np.abs(fit.c)
    top = float(size.max())
    mean = float(np.sum(size**2 * fit.frequency) / np.sum(size**2))
    return bool(float(size[:2].max()) > 0.45 * top or mean * width < 1.2)


def judge(
    u: FloatArray,
    flat: FloatArray,
    candidate: Candidate,
    window: Window | None,
    *,
    band_known: bool,
) -> tuple[str, float]:
    """Why this is no packet (empty where it is one), and the false-alarm probability."""
    if candidate.steady:
        return EVERYWHERE, 1.0
    if window is None:
        if candidate.false_alarm > ACCEPT:
            return NOTHING, candidate.false_alarm
        return "too few readings on what may be a packet", candidate.false_alarm
    part, values = u[window.first : window.stop], flat[window.first : window.stop]
    fit = window.fit
    cut = window.first == 0 or window.stop == u.size
    if cut:
        # a cut window holds fewer frequencies than the whole one that the fit is made for
        grid = band_grid(
            float(fit.frequency[0]), float(fit.frequency[-1]), float(part[-1] - part[0])
        )
        fit = fit_linear(part, values, fit.origin, grid, np.ones(part.size))
    _, chance = strength(values, fit)
    stretch = candidate.width * (candidate.high - candidate.low) / ENVELOPE_FWHM
    few = candidate.places * (stretch if band_known else 1.0) < FEW_PLACES
    alone = few or not band_known
    if alone:
        chance = min(1.0, chance * candidate.places)
    false_alarm = max(chance if alone else 0.0, FLOOR_KNOWN if few else candidate.false_alarm)
    if chance > (ACCEPT if alone else STRENGTH):
        return NOTHING, false_alarm
    if candidate.false_alarm > ACCEPT and not few:
        return EVERYWHERE, candidate.false_alarm
    if min(ends_over_top(part, fit)) > 0.6:
        return EVERYWHERE, 1.0
    if band_known and is_line(fit, candidate, window.width):
        return LINE, 1.0
    if band_known and not cut and is_flat(fit, candidate):
        return NOTHING, 1.0
    if not band_known and is_slow(fit, window.width):
        return SLOW, 1.0
    if is_step(part, values, float(np.sum(fit.residual**2))):
        return STEP, 1.0
    level = values - fit.level
    if carried_by_few(part, level, window.peak, window.width) or is_burst(
        part, values, fit, window
    ):
        return NOTHING, 1.0
    return "", false_alarm
