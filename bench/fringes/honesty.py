"""How sure: the noise of a reading as the packet itself shows it, and what follows from it.

Three things make readings scatter: the detector (the same everywhere), the position (in proportion
to the slope of the fringes) and the light (in proportion to the signal). Their shares are fitted to
the squared residuals in and around the packet; readings are weighted accordingly.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from bench.fringes.model import BoolArray, FloatArray
from bench.fringes.zero import PacketFit


@dataclass(frozen=True)
class NoiseShares:
    """Variance of a reading = detector^2 + (position * slope)^2 + (light * signal)^2."""

    detector: float
    position: float
    light: float

    def variance(self, slope: FloatArray, level: FloatArray) -> FloatArray:
        return np.asarray(
            self.detector**2 + (self.position * slope) ** 2 + (self.light * level) ** 2,
            dtype=np.float64,
        )


def noise_shares(
    residual: FloatArray, leverage: FloatArray, slope: FloatArray, signal: FloatArray
) -> NoiseShares:
    """Non-negative shares from squared residuals (n,), iteratively weighted.

    ``signal`` is the fitted signal with its level where the dark level is known, else the fringes.
    """
    square = residual**2 / np.maximum(1.0 - leverage, 0.1)
    columns = np.stack([np.ones_like(slope), slope**2, signal**2], axis=1)
    size = np.maximum(columns.mean(axis=0), 1e-300)
    columns = columns / size
    shares = np.array([float(np.mean(square)), 0.0, 0.0])
    floor = 1e-6 * float(np.mean(square)) + 1e-300
    for _ in range(6):
        expected = np.maximum(columns @ shares, floor)
        # a chi-square of one degree has a variance of twice its mean squared
        weight = 1.0 / expected
        active = [0, 1, 2]
        while True:
            part = columns[:, active] * weight[:, None]
            gram = part.T @ part
            gram += 1e-10 * np.trace(gram) * np.eye(len(active))
            solved = np.linalg.solve(gram, part.T @ (square * weight))
            if len(active) == 1 or bool(np.all(solved >= 0.0)):
                break
            active.pop(int(np.argmin(solved)))
        new = np.zeros(3)
        new[active] = np.maximum(solved, 0.0)
        if bool(np.all(np.abs(new - shares) < 1e-3 * np.sum(new))):
            shares = new
            break
        shares = new
    shares = shares / size
    return NoiseShares(
        detector=float(np.sqrt(max(shares[0], 0.0))),
        position=float(np.sqrt(shares[1])),
        light=float(np.sqrt(shares[2])),
    )


def wild_readings(residual: FloatArray, limit: float = 6.0) -> BoolArray:
    """Residuals far beyond the usual size of their neighbours, in the order of position.

    Only where there are enough readings for a usual size in stretches shorter than a packet.
    """
    n, size = residual.size, 24
    if n < 8 * size:
        return np.zeros(n, dtype=bool)
    blocks = np.pad(np.abs(residual), (0, -n % size), mode="reflect").reshape(-1, size)
    usual = np.pad(1.4826 * np.median(blocks, axis=1), 1, mode="edge")
    usual = np.maximum(usual[1:-1], np.maximum(usual[:-2], usual[2:]))
    floor = 0.1 * float(np.mean(usual))
    return np.asarray(np.abs(residual) > limit * np.repeat(np.maximum(usual, floor), size)[:n])


def covariance(fit: PacketFit, variance: FloatArray, *, broad: bool = False) -> FloatArray:
    """Covariance of all parameters (p, p): the largest of three views of the noise.

    By the fitted noise shares scaled to the residuals; by each residual itself (leverage-corrected,
    HC3 of MacKinnon & White 1985, from memory); and by residuals with their correlation over a
    few neighbours (Bartlett weights, Newey & West 1987, from memory). Largest by the variance of
    the shift, since that is what people rely on. ``broad``: a fit of much of the spectrum feels
    positions that are wrong together over a longer stretch (read-backs joined by straight lines),
    so correlation is followed over several lengths and the worst one taken.
    """
    misfit = float(np.sum(fit.residual**2 / variance)) / max(1, fit.freedom)
    by_shares = (fit.gain * (variance * max(misfit, 1.0))) @ fit.gain.T
    push = fit.gain * (fit.residual / np.maximum(1.0 - fit.leverage, 0.2))
    by_residual = push @ push.T
    lags = int(min(max(2, round(1.5 * fit.residual.size ** (1 / 3))), 40))
    correlated = [_correlated(fit, lags)]
    if broad:
        correlated += [_correlated(fit, min(n * lags, fit.residual.size // 4)) for n in (3, 6)]
    views = [by_shares, by_residual, *correlated]
    return np.asarray(max(views, key=lambda view: float(view[-2, -2])), dtype=np.float64)


def _correlated(fit: PacketFit, lags: int) -> FloatArray:
    plain = fit.gain * fit.residual
    total = plain @ plain.T
    for lag in range(1, lags + 1):
        cross = plain[:, lag:] @ plain[:, :-lag].T
        total = total + (1.0 - lag / (lags + 1.0)) * (cross + cross.T)
    return np.asarray(total * fit.residual.size / max(1, fit.freedom), dtype=np.float64)
