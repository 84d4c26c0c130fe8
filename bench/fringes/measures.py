"""Coherence lengths and widths of a fitted spectrum, with uncertainties by linear propagation."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from bench.fringes.model import FloatArray
from bench.fringes.zero import TREND_ORDER, PacketFit

FIRST = TREND_ORDER + 1


@dataclass(frozen=True)
class Widths:
    """In the unit of x: definitions of the contract's coherence lengths, and the packet's width."""

    rule: float
    fwhm: float
    integral: float
    packet: float

    def row(self) -> FloatArray:
        return np.array([self.rule, self.fwhm, self.integral, self.packet])


def half_width_crossing(grid: FloatArray, height: FloatArray, *, outermost: bool) -> float:
    """Full width where ``height`` falls to half of its maximum, by straight lines between points.

    ``outermost`` takes the crossings farthest from the maximum, else the nearest. NaN where the
    grid ends above one half.
    """
    top = int(np.argmax(height))
    half = 0.5 * float(height[top])
    over = height >= half
    if bool(over[0]) or bool(over[-1]):
        return float("nan")
    if outermost:
        left, right = int(np.argmax(over)) - 1, int(over.size - np.argmax(over[::-1]))
    else:
        left = int(np.nonzero(~over[:top])[0][-1])
        right = top + int(np.nonzero(~over[top:])[0][0])

    def cross(low: int, high: int) -> float:
        share = (half - height[low]) / (height[high] - height[low])
        return float(grid[low] + share * (grid[high] - grid[low]))

    return cross(right - 1, right) - cross(left, left + 1)


def widths(frequency: FloatArray, amplitude: FloatArray, theta: FloatArray) -> Widths:
    """All widths of a spectrum on an even grid, its phase being ``theta`` about its group zero."""
    step = float(frequency[1] - frequency[0])
    reach = 0.5 / step
    tau = np.linspace(-reach, reach, max(401, 16 * frequency.size + 1))
    turn = np.exp(2j * np.pi * np.outer(tau, frequency - frequency.mean()))
    coherence = np.abs(turn @ amplitude)
    packet = np.abs(turn @ (amplitude * np.exp(1j * theta)))
    # the same time-limited envelope gives the spectrum between its grid points
    fine = np.linspace(frequency[0] - step, frequency[-1] + step, 12 * frequency.size)
    between = np.sinc((fine[:, None] - frequency[None, :]) / step) @ amplitude
    total = float(np.sum(amplitude))
    band = half_width_crossing(fine, between, outermost=True)
    return Widths(
        rule=1.0 / band,
        fwhm=half_width_crossing(tau, coherence, outermost=False),
        integral=float(np.sum(amplitude**2)) / total**2 / step,
        packet=half_width_crossing(tau, packet, outermost=False),
    )


def widths_with_uncertainty(fit: PacketFit, cov: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Values and standard uncertainties, shape (4,) each, in the order of ``Widths``."""
    k = fit.frequency.size
    theta = fit.theta(fit.frequency) + 2.0 * np.pi * (fit.frequency - fit.reference) * fit.shift

    def row(amplitude: FloatArray) -> FloatArray:
        return widths(fit.frequency, amplitude, theta).row()

    value = row(fit.amplitude)
    nudge = 1e-3 * float(np.max(np.abs(fit.amplitude)))
    gradient = np.stack(
        [(row(fit.amplitude + nudge * np.eye(k)[i]) - value) / nudge for i in range(k)], axis=1
    )
    part = cov[FIRST : FIRST + k, FIRST : FIRST + k]
    variance = np.einsum("ik,kl,il->i", gradient, part, gradient)
    return value, np.sqrt(np.maximum(variance, 0.0))
