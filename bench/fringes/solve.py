"""The fit repeated until its weights, its reference and its positions agree with its residuals."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np

from bench.fringes.dispersion import Dispersion, of_glass, second_order, some_glass
from bench.fringes.honesty import covariance, noise_shares, wild_readings
from bench.fringes.measures import FIRST
from bench.fringes.model import FloatArray, Knowledge
from bench.fringes.results import Solution
from bench.fringes.ruler import slow_position_error
from bench.fringes.window import Window
from bench.fringes.zero import LinearFit, PacketFit, fit_linear, fit_packet

CUT_BEND_PRIOR = 1.0  # half a packet cannot tell dispersion from a shift
BEND_PRIOR = 6.0  # standard deviation of a prior on dispersion: 3 rad at the rms half-width
BENDS = np.linspace(-8.0, 8.0, 33)
NO_BEND = 1e-6
ROUNDS = 3
RULER_ROUNDS = 8
OUTLIER = 6.0
SCATTERED = 1.6  # by simulation, over what the fit alone says


def solve(
    u: FloatArray,
    signal: FloatArray,
    window: Window,
    known: Knowledge,
    per_m: float | None,
    wider: Window | None = None,
) -> Solution:
    """The packet in ``window`` of the sorted readings (u, signal); ``per_m`` is OPD a unit of u.

    ``wider`` is the same window with a wider band, used where the source is known to have light
    there or it explains the readings better.
    """
    part, values = u[window.first : window.stop], signal[window.first : window.stop]
    cut = window.first == 0 or window.stop == u.size
    prior = CUT_BEND_PRIOR if cut else BEND_PRIOR
    solution = _rounds(part, values, window.fit, window, known, per_m, prior)
    if wider is not None:
        whole = _rounds(part, values, wider.fit, wider, known, per_m, prior)
        if known.light is not None or _explains_more(whole.fit, solution.fit):
            unweighted = _rounds(part, values, wider.fit, wider, known, per_m, prior, 1)
            solution, window = _wary(whole, unweighted), wider
    error = slow_position_error(part, solution.fit)
    if error is None:
        return solution
    fit = solution.fit
    even = np.ones(part.size)
    for turn in range(RULER_ROUNDS):
        last = turn == RULER_ROUNDS - 1
        ruled = part + error
        start = fit_linear(ruled, values, fit.origin, fit.frequency, even)
        now = replace(window, peak=fit.origin + solution.fit.shift)
        solution = _rounds(ruled, values, start, now, known, per_m, NO_BEND, ROUNDS if last else 1)
        if last:
            break
        more = slow_position_error(ruled, solution.fit, again=True)
        if more is not None:
            error = error + more
    return replace(solution, ruled=True)


def _wary(whole: Solution, unweighted: Solution) -> Solution:
    """With what the residuals of a broad packet do not show in the uncertainty of its shift.

    That is how far weighing the readings and holding the many amplitudes may have moved it, and,
    where it is the positions that scatter, a margin found by simulation: over a wide spectrum their
    errors are no longer small beside a fringe.
    """
    cov = whole.covariance.copy()
    shares = whole.shares
    if shares.position * float(np.sqrt(np.mean(whole.fit.slope**2))) > shares.detector:
        cov[-2, :] *= SCATTERED
        cov[:, -2] *= SCATTERED
    cov[-2, -2] += (whole.fit.shift - unweighted.fit.shift) ** 2
    if whole.unheld is not None:
        cov[-2, -2] += (whole.fit.shift - whole.unheld.fit.shift) ** 2
    return replace(whole, covariance=cov)


def _explains_more(more: PacketFit, less: PacketFit) -> bool:
    """Whether the band's added frequencies earn their place (twice Schwarz 1978's penalty).

    Sidebands that surging positions write into the fringes do not: they turn the phase, which an
    added frequency with the packet's own phase cannot.
    """
    n = more.residual.size
    gain = n * math.log(
        float(np.sum(less.residual**2)) / max(float(np.sum(more.residual**2)), 1e-300)
    )
    return gain > 2.0 * max(1, more.frequency.size - less.frequency.size) * math.log(n)


def _dispersion(
    known: Knowledge, reference: float, scale: float, per_m: float | None
) -> Dispersion:
    if known.glass is not None and per_m is not None:
        return of_glass(known.glass, reference, scale, per_m)
    if per_m is not None:
        return some_glass(reference, scale, per_m)
    return second_order(reference, scale, per_m)


def _first_guesses(
    fit: LinearFit, window: Window, dispersion: Dispersion
) -> list[tuple[float, float]]:
    """(shift, bend): the envelope's maximum, and the highest maximum with dispersion undone."""
    peak = window.peak - fit.origin
    places = peak + np.linspace(-1.2, 1.2, 24 * fit.frequency.size) * window.width
    curve = dispersion.curve(fit.frequency)
    undone = fit.c[:, None] * np.exp(-1j * np.outer(curve, BENDS))
    height = np.abs(np.exp(2j * np.pi * np.outer(places, fit.frequency)) @ undone)
    at, which = np.unravel_index(int(np.argmax(height)), height.shape)
    return [(peak, 0.0), (float(places[at]), float(BENDS[which]))]


def _rounds(
    part: FloatArray,
    values: FloatArray,
    start: LinearFit,
    window: Window,
    known: Knowledge,
    per_m: float | None,
    bend_prior: float,
    rounds: int = ROUNDS,
) -> Solution:
    power = np.abs(start.c) ** 2
    reference = float(np.sum(np.sqrt(power) * start.frequency) / np.sum(np.sqrt(power)))
    rms = math.sqrt(float(np.sum(power * (start.frequency - reference) ** 2) / np.sum(power)))
    scale = max(rms, 1e-3 * reference)
    stated = known.at_wavelength_m is not None and per_m is not None
    if known.at_wavelength_m is not None and per_m is not None:
        reference = per_m / known.at_wavelength_m
    weight = np.ones(part.size)
    far = window.width
    guesses: list[tuple[float, float]] = []
    sizes: FloatArray | None = None
    if start.size is not None:
        sizes, far = np.full(start.frequency.size, start.size), 0.7 * far
    for turn in range(rounds):
        dispersion = _dispersion(known, reference, scale, per_m)
        if turn == 0:
            guesses = _first_guesses(start, window, dispersion)
            if bend_prior <= NO_BEND:
                guesses = guesses[:1]
        fits = [
            fit_packet(
                part, values, weight, start, reference, dispersion, bend_prior, guess, far, sizes
            )
            for guess in guesses
        ]
        fit = min(fits, key=lambda done: _cost(done, weight))
        wild = wild_readings(fit.residual)
        tame = ~wild
        shares = noise_shares(
            fit.residual[tame], fit.leverage[tame], fit.slope[tame], fit.fringes[tame]
        )
        variance = shares.variance(fit.slope, fit.fringes)
        variance = np.maximum(variance, 1e-3 * float(np.mean(variance)))
        wild |= np.abs(fit.residual) > OUTLIER * np.sqrt(variance)
        variance = np.where(wild, np.maximum(fit.residual**2, variance), variance)
        solution = Solution(fit, covariance(fit, variance, broad=start.size is not None), shares)
        sizes = _expected_sizes(solution)
        used = weight
        weight = np.where(wild, 1e-4, 1.0) / variance
        weight = weight / float(np.mean(weight))
        guesses = [(fit.shift, fit.bend)]
        mean, _ = solution.mean_frequency()
        last = turn == rounds - 1
        if last and rounds == ROUNDS:
            solution = replace(
                solution, unheld=_unheld(solution, part, values, used, start, bend_prior, far)
            )
        if not stated and not last:
            guesses = [(fit.shift - _delay(fit, mean), fit.bend)]
            reference = mean
    return solution


def _unheld(
    solution: Solution,
    part: FloatArray,
    values: FloatArray,
    weight: FloatArray,
    start: LinearFit,
    bend_prior: float,
    far: float,
) -> Solution:
    """The same packet with every amplitude free: less sure, but not drawn towards zero."""
    fit = solution.fit
    guess = (fit.shift, fit.bend)
    held = None if start.size is None else np.full(start.frequency.size, start.size)
    free = fit_packet(
        part, values, weight, start, fit.reference, fit.dispersion, bend_prior, guess, far, held
    )
    variance = solution.shares.variance(free.slope, free.fringes)
    variance = np.maximum(variance, 1e-3 * float(np.mean(variance)))
    return Solution(free, covariance(free, variance), solution.shares)


def _expected_sizes(solution: Solution) -> FloatArray:
    """Standard deviations for a prior on the amplitudes: their smoothed power above noise."""
    k = solution.fit.frequency.size
    scatter2 = np.diag(solution.covariance)[FIRST : FIRST + k]
    over = np.pad(np.maximum(solution.fit.amplitude**2 - scatter2, 0.0), 1, mode="edge")
    smooth = 0.25 * over[:-2] + 0.5 * over[1:-1] + 0.25 * over[2:]
    return np.sqrt(np.maximum(smooth, 0.04 * scatter2))


def _delay(fit: PacketFit, frequency: float) -> float:
    """Group delay that the dispersion found adds between the reference and ``frequency``."""
    step = 1e-3 * float(fit.frequency[-1] - fit.frequency[0])
    ends = fit.dispersion.curve(np.array([frequency - step, frequency + step]))
    return fit.bend * float(ends[1] - ends[0]) / (2.0 * step) / (2.0 * math.pi)


def _cost(fit: PacketFit, weight: FloatArray) -> float:
    return float(np.sum(weight * fit.residual**2)) / (1.0 if fit.converged else 0.8)
