"""Fourier sums over uneven positions, and the bases of band-limited fits.

A band is evaluated at its true frequencies, in cycles for one unit of ``x``, whatever the spacing
of the readings is: a known band makes a scan with fewer than two readings a fringe usable.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from bench.fringes.model import FloatArray

ComplexArray = NDArray[np.complex128]

CHUNK = 1 << 20


def fourier_sum(x: FloatArray, values: FloatArray, frequency: FloatArray) -> ComplexArray:
    """``sum_i values_i exp(-2 pi i f x_i)`` for every f; shapes (n,), (n,), (k,) -> (k,)."""
    out = np.empty(frequency.size, dtype=np.complex128)
    step = max(1, CHUNK // max(1, x.size))
    for start in range(0, frequency.size, step):
        block = frequency[start : start + step]
        out[start : start + step] = np.exp(-2j * np.pi * np.outer(block, x)) @ values
    return out


def band_grid(low: float, high: float, period: float) -> FloatArray:
    """Frequencies from ``low`` to ``high`` spaced by ``1 / period``, at least four of them."""
    count = max(4, int(np.ceil((high - low) * period)) + 1)
    return np.asarray(
        0.5 * (low + high) + (np.arange(count) - 0.5 * (count - 1)) / period, dtype=np.float64
    )


def harmonics(x: FloatArray, frequency: FloatArray) -> FloatArray:
    """Columns cos(2 pi f x) and -sin(2 pi f x), shape (n, 2k): (a, b) fits Re((a + ib) e^{i..})."""
    phase = 2.0 * np.pi * np.outer(x, frequency)
    return np.hstack([np.cos(phase), -np.sin(phase)])


def polynomial(x: FloatArray, order: int) -> FloatArray:
    """Legendre columns over the span of ``x``, shape (n, order + 1)."""
    low, high = float(x.min()), float(x.max())
    scaled = (2.0 * x - (low + high)) / max(high - low, 1e-300)
    return np.asarray(np.polynomial.legendre.legvander(scaled, order), dtype=np.float64)


def demodulate(
    x: FloatArray, values: FloatArray, carrier: float, width: float, per_width: int = 8
) -> tuple[FloatArray, ComplexArray, FloatArray]:
    """Slide a Gaussian of full width at half maximum ``width`` along a carrier.

    ``x`` rising, shape (n,). Returns positions (m,), the correlation z = sum y W exp(-2 pi i f x)
    (m,), and the sum of W squared over the readings (m,). Readings meet the carrier at
    their true positions; only the kernel is sampled, ``per_width`` times a width.
    """
    step = width / per_width
    count = int(np.ceil((x[-1] - x[0]) / step)) + 2
    place = (x - x[0]) / step
    cell = np.floor(place).astype(np.int64)
    share = place - cell
    turned = values * np.exp(-2j * np.pi * carrier * (x - x[0]))

    def spread(weights: FloatArray) -> FloatArray:
        left = np.bincount(cell, weights * (1.0 - share), minlength=count)
        right = np.bincount(cell + 1, weights * share, minlength=count)
        return np.asarray(left[:count] + right[:count], dtype=np.float64)

    offsets = np.arange(-2 * per_width, 2 * per_width + 1) / per_width
    kernel = np.exp(-4.0 * np.log(2.0) * offsets**2)
    pad = 2 * per_width

    def slide(cells: FloatArray, taps: FloatArray) -> FloatArray:
        return np.asarray(np.convolve(cells, taps)[pad : pad + count], dtype=np.float64)

    z = slide(spread(turned.real), kernel) + 1j * slide(spread(turned.imag), kernel)
    weight2 = slide(spread(np.ones_like(values)), kernel**2)
    grid = x[0] + step * np.arange(count)
    return (
        np.asarray(grid, dtype=np.float64),
        np.asarray(z, dtype=np.complex128),
        weight2,
    )
