"""Fit of a packet: level, free real spectrum, phase, group zero and dispersion, by least squares.

The model of the fringes about ``origin`` is

    s(u) = sum_k a_k cos(2 pi f_k u + theta(f_k)),
    theta(f) = phase - 2 pi (f - f_r) shift + bend D(f),

with u = x - origin, real a_k on a grid of frequencies across the band and D the dispersion's shape
(zero with zero slope at f_r). ``shift`` is then where the group delays agree at f_r. With normal
noise the least-squares solution is the maximum-likelihood one for a free spectrum (Kay 1993,
Fundamentals of Statistical Signal Processing, ch. 7, from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from bench.fringes.dispersion import Dispersion
from bench.fringes.model import FloatArray
from bench.fringes.spectrum import ComplexArray, harmonics, polynomial

TREND_ORDER = 2


@dataclass(frozen=True)
class LinearFit:
    """Free complex spectrum ``c`` (k,) of the readings about ``origin``, and what is left over."""

    origin: float
    frequency: FloatArray
    c: ComplexArray
    level: FloatArray
    residual: FloatArray
    leverage: FloatArray
    freedom: int
    size: float | None = None


def fit_linear(
    x: FloatArray,
    signal: FloatArray,
    origin: float,
    frequency: FloatArray,
    weight: FloatArray,
    size: float | None = None,
) -> LinearFit:
    """Weighted least squares of a quadratic level and a free complex spectrum.

    ``size`` holds the spectrum: the standard deviation of a prior on each of its amplitudes, for a
    band with frequencies that the readings determine badly; ``freedom`` is then a lower limit.
    """
    level_columns = polynomial(x, TREND_ORDER)
    design = np.hstack([level_columns, harmonics(x - origin, frequency)])
    root = np.sqrt(weight)
    weighted = design * root[:, None]
    k, p = frequency.size, TREND_ORDER + 1
    normal = weighted.T @ weighted
    if size is not None:
        free = fit_linear(x, signal, origin, frequency, weight)
        noise2 = float(np.sum(weight * free.residual**2)) / max(1, free.freedom)
        hold = np.full(p + 2 * k, noise2 / size**2)
        hold[:p] = 0.0
        normal = normal + np.diag(hold)
    strength, vectors = np.linalg.eigh(normal)
    keep = strength > 1e-10 * strength[-1]
    half = vectors[:, keep] / np.sqrt(strength[keep])
    left = weighted @ half
    solution = half @ (left.T @ (signal * root))
    return LinearFit(
        origin=origin,
        frequency=frequency,
        c=solution[p : p + k] + 1j * solution[p + k :],
        level=level_columns @ solution[:p],
        residual=signal - design @ solution,
        leverage=np.einsum("ij,ij->i", left, left),
        freedom=x.size - int(keep.sum()),
        size=size,
    )


def envelope_of(fit: LinearFit, u: FloatArray) -> ComplexArray:
    """Analytic signal of a linear fit at ``u`` about its origin."""
    return np.asarray(np.exp(2j * np.pi * np.outer(u, fit.frequency)) @ fit.c, dtype=np.complex128)


@dataclass(frozen=True)
class PacketFit:
    """The nonlinear solution. ``names`` of the last three parameters: phase, shift, bend.

    ``gain`` (parameters, n) maps a small change of the readings to the change it makes in each
    parameter, which is what every uncertainty here is propagated with.
    """

    origin: float
    reference: float
    frequency: FloatArray
    amplitude: FloatArray
    phase: float
    shift: float
    bend: float
    dispersion: Dispersion
    level: FloatArray
    fringes: FloatArray
    slope: FloatArray
    residual: FloatArray
    leverage: FloatArray
    gain: FloatArray
    freedom: int
    converged: bool

    def theta(self, frequency: FloatArray) -> FloatArray:
        """Phase of the spectrum about the origin, in radians."""
        away = frequency - self.reference
        return np.asarray(
            self.phase
            - 2.0 * np.pi * away * self.shift
            + self.bend * self.dispersion.curve(frequency),
            dtype=np.float64,
        )

    def analytic(self, u: FloatArray) -> ComplexArray:
        """Analytic signal at ``u`` about the origin; its modulus is the envelope."""
        c = self.amplitude * np.exp(1j * self.theta(self.frequency))
        return np.asarray(np.exp(2j * np.pi * np.outer(u, self.frequency)) @ c, dtype=np.complex128)


def _least_squares(columns: FloatArray, values: FloatArray, hold: FloatArray) -> FloatArray:
    """Least squares by normal equations, leaving out directions that the readings do not hold.

    ``hold`` are the weights with which each unknown is held to zero.
    """
    normal = columns.T @ columns + np.diag(hold**2)
    column = np.sqrt(np.maximum(np.diag(normal), 1e-300))
    size, vectors = np.linalg.eigh(normal / np.outer(column, column))
    keep = size > 1e-11 * size[-1]
    part = vectors[:, keep] / column[:, None]
    return np.asarray(part @ ((part.T @ (columns.T @ values)) / size[keep]), dtype=np.float64)


def fit_packet(
    x: FloatArray,
    signal: FloatArray,
    weight: FloatArray,
    start: LinearFit,
    reference: float,
    dispersion: Dispersion,
    bend_prior: float,
    guess: tuple[float, float],
    farthest: float,
    size_prior: FloatArray | None = None,
    rounds: int = 25,
) -> PacketFit:
    """Damped Gauss-Newton from a linear fit; ``guess`` is of shift and bend;
    the shift stays within ``farthest`` of it.

    ``bend_prior`` is the standard deviation, in units of ``bend``, of a weak prior that keeps a
    dispersion without evidence near zero; ``size_prior`` (k,) those of the amplitudes, which keep
    frequencies without light from passing noise for information.
    """
    f, k = start.frequency, start.frequency.size
    u = x - start.origin
    levels = polynomial(x, TREND_ORDER)
    p = levels.shape[1]
    root = np.sqrt(weight)
    carrier = 2.0 * np.pi * np.outer(u, f)
    curve = dispersion.curve(f)
    away = -2.0 * np.pi * (f - reference)

    def theta_of(values: FloatArray) -> FloatArray:
        return np.asarray(values[0] + away * values[1] + values[2] * curve, dtype=np.float64)

    shift, bend = guess
    turned = start.c * np.exp(-1j * theta_of(np.array([0.0, shift, bend])))
    phase = float(np.angle(np.sum(turned)))
    tail = np.array([phase, shift, bend])
    # The level, the spectrum and the three phases have very different sizes: one step of
    # 1 rad, of a radian across the band, and of a radian of bend are the natural units.
    units = np.array([1.0, 1.0 / max(float(np.max(np.abs(away))), 1e-300), 1.0])
    prior_root = 1.0 / max(bend_prior, 1e-12)
    noise = float(np.sqrt(np.sum(weight * start.residual**2) / max(1, start.freedom)))
    noise = max(noise, 1e-300)
    prior_root *= noise
    hold = np.zeros(p + k)
    if size_prior is not None:
        hold[p:] = noise / np.maximum(size_prior, 1e-300)

    def linear_part(values: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
        angle = carrier + theta_of(values)
        cosine, sine = np.cos(angle), np.sin(angle)
        columns = np.hstack([levels, cosine])
        solution = _least_squares(columns * root[:, None], signal * root, hold)
        return cosine, sine, solution, signal - columns @ solution

    cosine, sine, solution, residual = linear_part(tail)

    def cost_of(left: FloatArray, parts: FloatArray, bend_now: float) -> float:
        held = float(np.sum((hold * parts) ** 2)) + (prior_root * bend_now) ** 2
        return float(np.sum(weight * left**2)) + held

    cost = cost_of(residual, solution, float(tail[2]))
    bottom = np.zeros((p + k + 1, p + k + 3))
    bottom[np.arange(p + k), np.arange(p + k)] = hold
    bottom[-1, -1] = prior_root
    damping, converged = 1e-4, False
    for _ in range(rounds):
        turning = -sine * solution[p:]
        phases = np.stack([turning.sum(axis=1), turning @ away, turning @ curve], axis=1) * units
        jacobian = np.hstack([levels, cosine, phases]) * root[:, None]
        rhs = np.concatenate([residual * root, -hold * solution, [-prior_root * tail[2]]])
        full = np.vstack([jacobian, bottom])
        normal = full.T @ full
        gradient = full.T @ rhs
        moved = False
        for _try in range(6):
            damped = normal + np.diag(np.diag(normal) * damping + 1e-12 * np.trace(normal) / p)
            step = np.linalg.solve(damped, gradient)[-3:] * units
            trial = tail + step
            if abs(trial[1] - shift) > farthest:
                damping = max(damping, 1e-6) * 10.0
                continue
            attempt = linear_part(trial)
            new_cost = cost_of(attempt[3], attempt[2], float(trial[2]))
            if new_cost <= cost * (1.0 + 1e-12):
                moved = True
                break
            damping = max(damping, 1e-6) * 10.0
        if not moved:
            converged = True
            break
        damping = max(damping * 0.1, 1e-9)
        small = bool(np.all(np.abs(step / units) < 1e-5)) or cost - new_cost < 1e-9 * cost
        tail, cost = trial, new_cost
        cosine, sine, solution, residual = attempt
        if small:
            converged = True
            break

    turning = -sine * solution[p:]
    phases = np.stack([turning.sum(axis=1), turning @ away, turning @ curve], axis=1) * units
    jacobian = np.hstack([levels, cosine, phases]) * root[:, None]
    full = np.vstack([jacobian, bottom])
    n = x.size
    normal = full.T @ full
    column = np.sqrt(np.maximum(np.diag(normal), 1e-300))
    size, vectors = np.linalg.eigh(normal / np.outer(column, column))
    keep = size > 1e-11 * size[-1]
    half = vectors[:, keep] / np.sqrt(size[keep]) / column[:, None]
    left = full @ half
    gain = (half @ left[:n].T) * root[None, :]
    gain[-3:] *= units[:, None]
    amplitude = solution[p:]
    if float(np.sum(amplitude)) < 0.0:
        amplitude = -amplitude
        gain[p : p + k] *= -1.0
        tail = tail + np.array([np.pi, 0.0, 0.0])
    slope = -(sine * solution[p:]) @ (2.0 * np.pi * f)
    return PacketFit(
        origin=start.origin,
        reference=reference,
        frequency=f,
        amplitude=amplitude,
        phase=float((tail[0] + np.pi) % (2.0 * np.pi) - np.pi),
        shift=float(tail[1]),
        bend=float(tail[2]),
        dispersion=dispersion,
        level=levels @ solution[:p],
        fringes=cosine @ solution[p:],
        slope=slope,
        residual=residual,
        leverage=np.einsum("ij,ij->i", left[:n], left[:n]),
        gain=gain,
        freedom=n - int(keep.sum()),
        converged=converged,
    )
