"""A scan in, a located zero and its honesty out: the types on both sides of the estimator."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True)
class Estimate:
    """A number with its standard uncertainty; its unit is in the name of the field."""

    value: float
    standard_uncertainty: float


@dataclass(frozen=True)
class Scan:
    """One pass over the packet.

    ``x`` and ``signal`` have shape (n,), are finite, in any order and spacing. ``x`` is whatever
    the scan's axis is (stage reading in metres, OPD in metres, counts). ``opd_per_x`` is the signed
    change of OPD in metres for one unit of ``x``; None where it is not known, and then everything
    that needs a length is left out of the result. ``saturated`` marks clipped readings, ``dark`` is
    the signal without light.
    """

    x: FloatArray
    signal: FloatArray
    opd_per_x: float | None = None
    opd_per_x_relative_uncertainty: float = 0.0
    saturated: BoolArray | None = None
    dark: float | None = None


@dataclass(frozen=True)
class Knowledge:
    """What is known before the scan is looked at. Everything may be absent.

    ``band`` is the source's half-power band as vacuum wavenumbers in 1/m, (low, high), and makes
    scans below one reading a fringe usable. ``at_wavelength_m`` is where the group zero is wanted.
    ``glass`` names the material of any residual glass. ``noise`` is of one reading. ``light`` is
    where the source has any light worth speaking of, in 1/m (low, high): a lamp between hard edges
    may have half of its light beyond its half-power points.
    """

    band: tuple[float, float] | None = None
    at_wavelength_m: float | None = None
    glass: str | None = None
    noise: float | None = None
    light: tuple[float, float] | None = None


@dataclass(frozen=True)
class Notice:
    """A warning of the contract: ``code`` for programs, ``message`` for people."""

    code: str
    message: str


@dataclass(frozen=True)
class FringeZero:
    """The extremum nearest to the group zero, and the probability that it is that one."""

    x: Estimate
    kind: str  # "bright" | "dark"
    probability: float


@dataclass(frozen=True)
class CoherenceLengths:
    """Of the spectrum seen, in metres of OPD; ``packet_width`` of the envelope as it is."""

    rule_m: Estimate | None
    fwhm_m: Estimate | None
    integral_m: Estimate | None
    packet_width_m: Estimate | None


@dataclass(frozen=True)
class ResidualGlass:
    """Signed path in ``material`` that arm A has more of; None where no material is named."""

    material: str | None
    thickness_m: Estimate | None
    dispersion_fs2: Estimate | None


@dataclass(frozen=True)
class Envelope:
    """For pictures: ``x``, the fitted signal and the envelope about ``level``, shape (m,)."""

    x: FloatArray
    fit: FloatArray
    envelope: FloatArray
    level: FloatArray


@dataclass(frozen=True)
class Located:
    """What a scan says of the zero.

    With ``found`` false only ``reason``, ``noise``, ``false_alarm_probability``,
    ``weakest_contrast`` and ``notices`` mean anything. ``zero`` and ``fringe_zero`` are in the
    scan's own axis. ``amplitude`` (half peak to peak at the packet's maximum) and ``noise`` are in
    the signal's unit.
    """

    found: bool
    reason: str = ""
    zero: Estimate | None = None
    at_wavelength_m: Estimate | None = None
    fringe_zero: FringeZero | None = None
    contrast: Estimate | None = None
    amplitude: Estimate | None = None
    mean_wavelength_m: Estimate | None = None
    coherence: CoherenceLengths | None = None
    residual_glass: ResidualGlass | None = None
    noise: float = float("nan")
    degrees_of_freedom: float = float("inf")
    false_alarm_probability: float = 1.0
    weakest_contrast: float | None = None
    notices: tuple[Notice, ...] = ()
    picture: Envelope | None = field(default=None, compare=False, repr=False)
