"""From a fitted packet to what people asked for, each number with its uncertainty."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from bench.fringes.honesty import NoiseShares
from bench.fringes.measures import FIRST, widths_with_uncertainty
from bench.fringes.model import (
    CoherenceLengths,
    Envelope,
    Estimate,
    FloatArray,
    FringeZero,
    ResidualGlass,
)
from bench.fringes.zero import PacketFit

SPEED_OF_LIGHT_M_S = 299_792_458.0
GUESSED = 0.3  # of the higher orders of a glass that nobody named, by how much glasses differ


@dataclass(frozen=True)
class Solution:
    """A fit with the covariance of its parameters and the noise they came from."""

    fit: PacketFit
    covariance: FloatArray
    shares: NoiseShares
    ruled: bool = False  # whether positions were corrected by the fringes' own phase
    unheld: Solution | None = None

    @property
    def sizes(self) -> Solution:
        """For amplitudes and widths: the same fit without holding weak frequencies to zero."""
        return self if self.unheld is None else self.unheld

    def mean_frequency(self) -> tuple[float, FloatArray]:
        """Amplitude-weighted mean frequency and its gradient for the amplitudes (k,)."""
        a, f = self.fit.amplitude, self.fit.frequency
        total = float(np.sum(a))
        mean = float(np.sum(a * f)) / total
        return mean, np.asarray((f - mean) / total, dtype=np.float64)

    def spread_of(self, gradient: FloatArray) -> float:
        """Standard uncertainty of a linear form of the parameters (p,)."""
        return float(math.sqrt(max(float(gradient @ self.covariance @ gradient), 0.0)))


def group_zero(solution: Solution, *, stated: bool) -> Estimate:
    """The group zero about the fit's origin at the fit's reference frequency.

    Where the reference is the spectrum's own mean (not ``stated``), the uncertainty of that mean
    moves the group zero by the dispersion found, and is carried.
    """
    fit = solution.fit
    gradient = np.zeros(solution.covariance.shape[0])
    gradient[-2] = 1.0
    if not stated:
        _, of_mean = solution.mean_frequency()
        step = 1e-4 * float(fit.frequency[-1] - fit.frequency[0])
        ends = fit.dispersion.curve(np.array([fit.reference - step, 0.0, fit.reference + step]))
        second = float(ends[0] + ends[2]) / step**2
        k = fit.frequency.size
        gradient[FIRST : FIRST + k] = -fit.bend * second / (2.0 * np.pi) * of_mean
    return Estimate(
        fit.shift, math.hypot(solution.spread_of(gradient), GUESSED * _beyond_second_order(fit))
    )


def _beyond_second_order(fit: PacketFit) -> float:
    """What the assumed glass' higher orders move the group zero by, 0 where none is assumed."""
    if fit.dispersion.beyond is None:
        return 0.0
    away = fit.frequency - fit.reference
    size = np.abs(fit.amplitude)
    columns = np.stack([np.ones_like(away), away, away**2], axis=1) * size[:, None]
    scale = np.maximum(np.sqrt(np.sum(columns**2, axis=0)), 1e-300)
    phase = fit.dispersion.beyond(fit.frequency) * size
    solved, *_ = np.linalg.lstsq(columns / scale, phase, rcond=1e-9)
    return abs(fit.bend * float(solved[1] / scale[1])) / (2.0 * math.pi)


def scale_share(
    glass: ResidualGlass | None, at_wavelength_m: float, relative: float, opd_per_x: float
) -> float:
    """What an axis that is wrong by ``relative`` moves the group zero, in units of x (>= 0).

    Such an axis takes one wavelength for another, and with unbalanced glass the group zero depends
    on the wavelength: in OPD by c omega D per relative change, D the group delay dispersion (from
    tau = tau0 + D (omega - omega0)).
    """
    if glass is None or glass.dispersion_fs2 is None or relative == 0.0:
        return 0.0
    per_second = 2.0 * math.pi * SPEED_OF_LIGHT_M_S / at_wavelength_m
    dispersion_s2 = abs(glass.dispersion_fs2.value) * 1e-30
    return abs(SPEED_OF_LIGHT_M_S * per_second * dispersion_s2 * relative / opd_per_x)


def fringe_zero(solution: Solution, zero: Estimate) -> FringeZero | None:
    """The extremum of the fringes nearest to the group zero, about the fit's origin.

    Its probability is that of the phase at the true group zero being within a quarter turn of it,
    the group zero being normal about its estimate.
    """
    fit = solution.fit
    mean, _ = solution.mean_frequency()
    if mean <= 0.0:
        return None
    psi = float(np.angle(fit.analytic(np.array([zero.value]))[0]))
    order = round(psi / math.pi)
    rest = psi - math.pi * order
    place = zero.value - rest / (2.0 * math.pi * mean)
    a, f = fit.amplitude, fit.frequency
    for _ in range(8):
        angle = 2.0 * math.pi * f * place + fit.theta(f)
        slope = float(-np.sum(a * 2.0 * math.pi * f * np.sin(angle)))
        bend = float(-np.sum(a * (2.0 * math.pi * f) ** 2 * np.cos(angle)))
        if bend == 0.0:
            break
        step = -slope / bend
        place += max(-0.1 / mean, min(0.1 / mean, step))
        if abs(step) < 1e-9 / mean:
            break
    # The slope at the extremum is a function of the parameters: its gradient over the curvature.
    angle = 2.0 * math.pi * f * place + fit.theta(f)
    wave = 2.0 * math.pi * f
    by_theta = -a * wave * np.cos(angle)
    gradient = np.zeros(solution.covariance.shape[0])
    gradient[FIRST : FIRST + f.size] = -wave * np.sin(angle)
    gradient[-3] = float(np.sum(by_theta))
    gradient[-2] = float(np.sum(by_theta * (-2.0 * math.pi * (f - fit.reference))))
    gradient[-1] = float(np.sum(by_theta * fit.dispersion.curve(f)))
    curvature = float(-np.sum(a * wave**2 * np.cos(angle)))
    uncertainty = solution.spread_of(gradient) / max(abs(curvature), 1e-300)
    scatter = 2.0 * math.pi * mean * zero.standard_uncertainty
    return FringeZero(
        x=Estimate(place, uncertainty),
        kind="bright" if order % 2 == 0 else "dark",
        probability=_within(math.pi / 2.0, rest, scatter),
    )


def _within(limit: float, offset: float, sd: float) -> float:
    if sd <= 0.0:
        return 1.0
    up, down = (limit - offset) / sd, (-limit - offset) / sd
    return 0.5 * (math.erf(up / math.sqrt(2.0)) - math.erf(down / math.sqrt(2.0)))


def peak_amplitude(solution: Solution, first: float, last: float) -> Estimate:
    """Envelope at its maximum between ``first`` and ``last`` about the origin, as recorded."""
    fit = solution.fit
    grid = np.linspace(first, last, 24 * fit.frequency.size)
    analytic = fit.analytic(grid)
    top = int(np.argmax(np.abs(analytic)))
    return _envelope_at(solution, float(grid[top]))


def _envelope_at(solution: Solution, place: float) -> Estimate:
    fit = solution.fit
    analytic = complex(fit.analytic(np.array([place]))[0])
    size = abs(analytic)
    turn = np.exp(1j * (2.0 * np.pi * fit.frequency * place + fit.theta(fit.frequency)))
    gradient = np.zeros(solution.covariance.shape[0])
    back = np.conj(analytic) / max(size, 1e-300)
    gradient[FIRST : FIRST + fit.frequency.size] = np.real(back * turn)
    return Estimate(size, solution.spread_of(gradient))


def contrast(solution: Solution, zero: float, level: float, dark: float | None) -> Estimate | None:
    """Envelope at the group zero over the mean level above dark; None without a dark level."""
    if dark is None or level <= dark:
        return None
    size = _envelope_at(solution, zero)
    return Estimate(size.value / (level - dark), size.standard_uncertainty / (level - dark))


def mean_wavelength(solution: Solution, per_m: float, relative: float) -> Estimate:
    """1 / mean wavenumber; ``relative`` is the relative uncertainty of the axis' length."""
    mean, gradient = solution.mean_frequency()
    k = solution.fit.frequency.size
    part = solution.covariance[FIRST : FIRST + k, FIRST : FIRST + k]
    u = math.sqrt(max(float(gradient @ part @ gradient), 0.0)) / mean
    return Estimate(per_m / mean, per_m / mean * math.hypot(u, relative))


def coherence(solution: Solution, per_m: float, relative: float) -> CoherenceLengths:
    """Coherence lengths in metres of OPD; None for one that the scan is too short to show."""
    values, scatter = widths_with_uncertainty(solution.fit, solution.covariance)
    made = [
        Estimate(v * per_m, per_m * math.hypot(s, v * relative))
        if math.isfinite(v) and math.isfinite(s) and v > 0.0
        else None
        for v, s in zip(values.tolist(), scatter.tolist(), strict=True)
    ]
    return CoherenceLengths(*made)


def residual_glass(solution: Solution, sign: float) -> ResidualGlass | None:
    """Signed residual glass, positive for more in A.

    None where the axis has no length, or the fringes themselves served as the ruler.
    """
    law, bend = solution.fit.dispersion, sign * solution.fit.bend
    u = math.sqrt(max(float(solution.covariance[-1, -1]), 0.0))
    if law.fs2_per_bend is None or solution.ruled:
        return None
    return ResidualGlass(
        material=law.material,
        thickness_m=None
        if law.m_per_bend is None
        else Estimate(bend * law.m_per_bend, u * abs(law.m_per_bend)),
        dispersion_fs2=Estimate(bend * law.fs2_per_bend, u * abs(law.fs2_per_bend)),
    )


def picture(fit: PacketFit, inside: FloatArray, middle: float, span: float) -> Envelope:
    """The fit on an even grid over the window; ``inside`` are its readings about the origin."""
    grid = np.linspace(inside[0], inside[-1], min(2000, 24 * fit.frequency.size))
    analytic = fit.analytic(grid)
    level = np.asarray(np.interp(grid, inside, fit.level), dtype=np.float64)
    return Envelope(
        x=np.asarray(middle + span * (grid + fit.origin), dtype=np.float64),
        fit=np.asarray(level + analytic.real, dtype=np.float64),
        envelope=np.asarray(np.abs(analytic), dtype=np.float64),
        level=level,
    )
