"""From a fitted packet to what people asked for, each number with its uncertainty."""

from __future__ import annotations

import numpy as np

from bench.fringes.detect import Candidate
from bench.fringes.honesty import covariance, noise_shares
from bench.fringes.model import (
    Envelope,
    Estimate,
    FloatArray,
    Knowledge,
    Located,
    Notice,
    Scan,
)
from bench.fringes.window import Window
from bench.fringes.zero import PacketFit


def build(
    scan: Scan,
    known: Knowledge,
    u: FloatArray,
    signal: FloatArray,
    window: Window,
    fit: PacketFit,
    candidate: Candidate,
    notices: list[Notice],
    *,
    middle: float,
    span: float,
) -> Located:
    shares = noise_shares(fit.residual, fit.leverage, fit.slope, fit.fringes)
    cov = covariance(fit, shares.variance(fit.slope, fit.fringes))
    u_shift = float(np.sqrt(max(cov[-2, -2], 0.0)))
    zero = middle + span * (fit.origin + fit.shift)
    top = float(np.max(np.abs(fit.analytic(u[window.first : window.stop] - fit.origin))))
    grid = np.linspace(u[window.first] - fit.origin, u[window.stop - 1] - fit.origin, 400)
    analytic = fit.analytic(grid)
    level = np.interp(grid + fit.origin, u[window.first : window.stop], fit.level)
    return Located(
        found=True,
        zero=Estimate(zero, span * u_shift),
        fringe_zero=None,
        amplitude=Estimate(top, float("nan")),
        noise=float(np.sqrt(np.sum(fit.residual**2) / max(1, fit.freedom))),
        degrees_of_freedom=float(fit.freedom),
        false_alarm_probability=candidate.false_alarm,
        notices=tuple(notices),
        picture=Envelope(
            x=middle + span * (grid + fit.origin),
            fit=level + analytic.real,
            envelope=np.abs(analytic),
            level=level,
        ),
    )
