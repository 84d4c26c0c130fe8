"""Slow errors of the positions, read off the fringes themselves.

A motor that surges writes a phase into the fringes that no spectrum explains. The envelope does not
feel it, but a fit at the reported positions does. Where fringes are sampled finely, their own phase
tells how far each position was off; with positions so corrected the packet is itself again. What is
lost is dispersion, which writes a phase as well.
"""

from __future__ import annotations

import math

import numpy as np

from bench.fringes.model import FloatArray
from bench.fringes.zero import PacketFit

READINGS_A_FRINGE = 4.0
SHARE = 0.35
QUADRATURE = 3.0


def slow_position_error(u: FloatArray, fit: PacketFit, *, again: bool = False) -> FloatArray | None:
    """Position errors (n,) in the unit of u, or None where the residuals do not show any.

    ``u`` rising, the positions of the fit. Residuals show some where most of their energy lies
    within half a carrier of the carrier yet outside the band, and turns the fringes (quadrature)
    rather than scaling them. ``again`` leaves this test out: what one round has left over.
    """
    n = u.size
    carrier = float(np.sum(fit.amplitude * fit.frequency) / np.sum(fit.amplitude))
    span = float(u[-1] - u[0])
    if n < 64 or n / span < READINGS_A_FRINGE * carrier:
        return None
    even = np.linspace(u[0], u[-1], n)
    spectrum = np.fft.fft(np.interp(even, u, fit.residual))
    frequency = np.fft.fftfreq(n, span / (n - 1))
    near = (frequency > 0.5 * carrier) & (frequency < 1.5 * carrier)
    share = 2.0 * float(np.sum(np.abs(spectrum[near]) ** 2)) / float(np.sum(np.abs(spectrum) ** 2))
    white = 2.0 * float(near.sum()) / n
    if not again and share < white + SHARE * (1.0 - white):
        return None
    left = np.fft.ifft(np.where(near, 2.0 * spectrum, 0.0))
    model = fit.analytic(even - fit.origin)
    size = np.abs(model)
    turned = left * np.conj(model) / np.maximum(size, 1e-300)
    inside = size > 0.2 * float(size.max())
    along = float(np.mean(turned.real[inside] ** 2))
    across = float(np.mean(turned.imag[inside] ** 2))
    if not again and across < QUADRATURE * along:
        return None
    total = model + left
    # phase of the readings ahead of the model's, trusted as far as the fringes stand out
    noise2 = max(along, 1e-300)
    ahead = np.angle(total * np.conj(model)) * size**2 / (size**2 + 4.0 * noise2)
    ahead = ahead - float(np.sum(ahead * size**2) / np.sum(size**2))
    return np.asarray(np.interp(u, even, ahead / (2.0 * math.pi * carrier)), dtype=np.float64)
