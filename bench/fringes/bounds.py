"""The least uncertainty that any unbiased estimate of a zero can have: the yardstick.

For a packet A exp(-(x - x0)^2 / (2 s^2)) cos(2 pi f0 (x - x0) + phi) in white noise of standard
deviation q a reading, readings a step D apart and the whole packet inside the scan.
Source: Fleischer, Windecker & Tiziani 2001, Appl. Opt. 40, 2815; Kay 1993, Fundamentals of
Statistical Signal Processing, ch. 3 (from memory).
"""

from __future__ import annotations

import math

import numpy as np

from bench.fringes.model import FloatArray

__all__ = ["envelope_bound", "fisher_bound", "fringe_bound"]


def envelope_bound(noise: float, amplitude: float, rms_width: float, step: float) -> float:
    """Least standard deviation of the envelope's centre with the phase free, in the unit of x.

    (2 / pi^(1/4)) (q / A) sqrt(s D); ``rms_width`` is s, ``step`` is D. All arguments > 0.
    """
    return 2.0 / float(math.pi**0.25) * noise / amplitude * math.sqrt(rms_width * step)


def fringe_bound(
    noise: float, amplitude: float, rms_width: float, step: float, wavelength: float
) -> float:
    """Least standard deviation of a bright fringe's position, in the unit of x.

    (wavelength / 2 pi) (q / A) sqrt(2 D / (s sqrt(pi))), for a packet of many fringes.
    """
    phase = noise / amplitude * math.sqrt(2.0 * step / (rms_width * math.sqrt(math.pi)))
    return wavelength / (2.0 * math.pi) * phase


def fisher_bound(gradient: FloatArray, noise: float | FloatArray) -> FloatArray:
    """Least standard deviations of all parameters of any model, shape (p,).

    ``gradient`` (n, p) are the derivatives of the noiseless readings for the parameters, ``noise``
    the standard deviation of a reading, one or (n,). Raises ValueError where a parameter cannot be
    told from the others.
    """
    scaled = (
        gradient / np.broadcast_to(np.asarray(noise, dtype=np.float64), gradient.shape[:1])[:, None]
    )
    size = np.sqrt(np.sum(scaled**2, axis=0))
    if not bool(np.all(size > 0.0)):
        raise ValueError("a parameter does not change any reading")
    unit = scaled / size
    information = unit.T @ unit
    if float(np.linalg.cond(information)) > 1e13:
        raise ValueError("the parameters cannot be told from each other")
    return np.asarray(np.sqrt(np.diag(np.linalg.inv(information))) / size, dtype=np.float64)
