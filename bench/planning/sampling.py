"""How fast a packet may be passed so that it is still seen, and how well it is located then."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from bench.planning.kinematics import step_time
from bench.planning.model import BenchFacts, Mode, SourceFacts

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

__all__ = [
    "FINAL_ROOM",
    "Way",
    "detection",
    "final_room_m",
    "final_way",
    "locating_sd_m",
    "packet_fwhm_m",
    "search_way",
]

FWHM_PER_SD = 2.0 * math.sqrt(2.0 * math.log(2.0))

# Common practice, no source, all of these:
READINGS_PER_PACKET = 10.0  # within the packet's full width at half maximum, when searching
FINAL_ROOM = 3.0  # packet widths to each side: the whole packet, its lobes and some plain noise
FOOT = 2.4  # of one over the half-power band: what the fit of a packet asks for
READINGS_PER_FRINGE = 3.0  # where the fringes are not undersampled on purpose
SPEED_TOLERANCE = 0.03  # how well a stage keeps its speed
FOLD_ROOM = 0.05  # fringes a reading between an aliased band and where it would fold
WANTED_DETECTION = 0.999
BEST_DETECTION = 0.999  # nothing is believed to be seen more surely: lamps do fail
WORST_DETECTION = 0.5  # a source that is seen less often is no use
BOUND_MARGIN = 1.5  # real estimates over the bound
FINAL_FRINGE_LEFT = 0.98  # of the amplitude, after blur, in the final scan
FINAL_PATIENCE_S = 120.0
GOAL_PARTS = 6.0  # the zero is wanted to this part of the acceptance limit

FALSE_ALARM = 1e-4
_PLACES = 1e4  # independent places where noise may look like a packet


@dataclass(frozen=True)
class Way:
    """One way of scanning with one source.

    ``spacing_m`` is from reading to reading in stage reading; ``sd_m`` the standard uncertainty of
    a packet located that way, without glass; ``amplitude_left`` the part of the fringe amplitude
    that blur leaves; ``per_fringe`` the readings in one fringe.
    """

    mode: Mode
    speed_m_s: float | None
    increment_m: float | None
    spacing_m: float
    detection_probability: float
    sd_m: float
    amplitude_left: float
    per_fringe: float
    undersampled: bool

    def time_per_metre(self, facts: BenchFacts) -> float:
        """Seconds for one metre of stage reading, ends left out."""
        if self.speed_m_s is not None:
            return 1.0 / self.speed_m_s
        return step_time(facts, self.spacing_m) / self.spacing_m


def packet_fwhm_m(facts: BenchFacts, source: SourceFacts) -> float:
    """Full width at half maximum of the source's packet in stage reading."""
    return source.coherence_fwhm_m / abs(facts.opd_per_m)


def final_room_m(facts: BenchFacts, source: SourceFacts) -> float:
    """Stage reading to either side of the packet that the final scan covers, side lobes included.

    A lamp between hard edges has a packet that is narrow at half its height and wide at its foot:
    its strongest wavelengths keep in step for about one over the half-power band.
    """
    low, high = source.band
    foot = FOOT / (high - low) / abs(facts.opd_per_m) if high > low else 0.0
    return max(FINAL_ROOM * packet_fwhm_m(facts, source), foot)


def _blur(facts: BenchFacts, source: SourceFacts, speed_m_s: FloatArray) -> FloatArray:
    """Part of the amplitude left when a reading integrates over moving fringes: |sinc|."""
    moved = abs(facts.opd_per_m) * speed_m_s * facts.integration_s
    result: FloatArray = np.abs(np.sinc(moved / source.mean_wavelength_m))
    return result


def detection(amplitude: FloatArray, noise: float, readings: FloatArray) -> FloatArray:
    """Probability that a Gaussian packet of unknown place and phase is detected.

    ``amplitude`` and ``noise`` (one reading's standard deviation) share a unit; ``readings`` is
    their number within the packet's FWHM; shapes (n,). A filter matched to the packet collects
    d^2 = A^2 sqrt(pi) s / (2 D q^2), with s the envelope's standard deviation and D the spacing;
    its envelope passes the threshold b with probability Q1(d, b), Marcum's function, taken as
    Phi(d - b + 1/(2 d)) which holds for large d; b^2 = 2 ln(places / false alarm). Kay 1998,
    Fundamentals of Statistical Signal Processing II, ch. 7 (sinusoid of unknown phase), from
    memory.
    """
    collected = np.sqrt(math.pi) * readings / FWHM_PER_SD
    d = amplitude / noise * np.sqrt(collected / 2.0)
    threshold = math.sqrt(2.0 * math.log(_PLACES / FALSE_ALARM))
    argument = d - threshold + 1.0 / (2.0 * np.maximum(d, 1.0))
    return np.array([0.5 * math.erfc(-value / math.sqrt(2.0)) for value in np.ravel(argument)])


def locating_sd_m(
    facts: BenchFacts, source: SourceFacts, spacing_m: float, amplitude_left: float, jitter_m: float
) -> float:
    """Standard uncertainty, in stage reading, of a packet located with readings that far apart.

    Least of any unbiased estimate with the phase free: (2 / pi^(1/4)) (q/A) sqrt(s D), s the
    envelope's standard deviation and D the spacing (Fleischer, Windecker & Tiziani 2001, Appl. Opt.
    40, 2815), times a margin. Positions rounded to the stage's resolution r act as noise of
    A (2 pi / fringe) r / sqrt(12) / sqrt(2) beside q. ``jitter_m``, what the link between positions
    and readings leaves uncertain, is added in squares.
    """
    sd = packet_fwhm_m(facts, source) / FWHM_PER_SD
    ratio = facts.noise / (source.signal * max(amplitude_left, 1e-6))
    turn = 2.0 * math.pi * abs(facts.opd_per_m) / source.mean_wavelength_m
    uneven = turn * facts.resolution_m / math.sqrt(12.0) / math.sqrt(2.0)
    bound = 2.0 / math.pi**0.25 * math.hypot(ratio, uneven) * math.sqrt(sd * spacing_m)
    return math.hypot(BOUND_MARGIN * bound, jitter_m)


def _sees_band(facts: BenchFacts, source: SourceFacts, spacing_m: FloatArray) -> BoolArray:
    """True where the aliased band of the source keeps clear of the folds of the sampling.

    The half-power band is doubled about its middle and the spacing allowed its tolerance. In
    fringes a reading, the band then has to lie between two neighbouring multiples of one half, and
    not near one: there it folds onto itself, or ends among drift and hum.
    """
    low, high = source.band
    middle, half = (low + high) / 2.0, (high - low) / 2.0
    opd = abs(facts.opd_per_m) * spacing_m
    least = np.maximum(middle - 2.0 * half, 0.0) * opd * (1.0 - SPEED_TOLERANCE) - FOLD_ROOM
    most = (middle + 2.0 * half) * opd * (1.0 + SPEED_TOLERANCE) + FOLD_ROOM
    result: BoolArray = np.floor(2.0 * least) == np.floor(2.0 * most)
    return result


@lru_cache(maxsize=256)
def search_way(facts: BenchFacts, source: SourceFacts, *, careful: bool) -> Way | None:
    """The cheapest way to search with ``source``; None where it is seen less often than not.

    ``careful`` forgoes undersampling and doubles the readings in a packet: for places that were
    scanned once in vain.
    """
    ways = [
        way
        for way in (
            _search_sweep(facts, source, careful=careful),
            _search_step(facts, source, careful=careful),
        )
        if way is not None and way.detection_probability >= WORST_DETECTION
    ]
    if not ways:
        return None
    # A way that is seen surely goes before one that is not, and then the faster.
    sure = [way for way in ways if way.detection_probability >= WANTED_DETECTION]
    return min(sure or ways, key=lambda way: way.time_per_metre(facts))


def _spacings(facts: BenchFacts, source: SourceFacts, longest_m: float) -> FloatArray:
    """Spacings worth trying, rising: from 16 readings a fringe to the longest."""
    finest = source.mean_wavelength_m / abs(facts.opd_per_m) / 16.0
    return np.geomspace(min(finest, longest_m), longest_m, 512)


def _usable(
    facts: BenchFacts, source: SourceFacts, spacing: FloatArray, *, careful: bool
) -> BoolArray:
    fringe = source.mean_wavelength_m / abs(facts.opd_per_m)
    wanted = READINGS_PER_PACKET * (2.0 if careful else 1.0)
    dense = packet_fwhm_m(facts, source) / spacing >= wanted
    fine = fringe / spacing >= READINGS_PER_FRINGE
    seen = fine if careful else fine | _sees_band(facts, source, spacing)
    result: BoolArray = dense & seen
    return result


def _best(
    facts: BenchFacts, source: SourceFacts, spacing: FloatArray, left: FloatArray, *, careful: bool
) -> tuple[int, float] | None:
    """Index of the widest usable spacing that is seen surely, else of the one best seen."""
    usable = np.flatnonzero(_usable(facts, source, spacing, careful=careful))
    if usable.size == 0:
        return None
    seen = detection(
        source.signal * left[usable],
        facts.noise,
        packet_fwhm_m(facts, source) / spacing[usable],
    )
    sure = np.flatnonzero(seen >= WANTED_DETECTION)
    chosen = int(sure[-1]) if sure.size else int(np.argmax(seen))
    return int(usable[chosen]), min(float(seen[chosen]), BEST_DETECTION)


def _search_sweep(facts: BenchFacts, source: SourceFacts, *, careful: bool) -> Way | None:
    spacing = _spacings(facts, source, facts.speed_m_s / facts.rate_hz)
    left = _blur(facts, source, spacing * facts.rate_hz)
    best = _best(facts, source, spacing, left, careful=careful)
    if best is None:
        return None
    index, seen = best
    return _sweep(facts, source, float(spacing[index]), float(left[index]), seen)


def _search_step(facts: BenchFacts, source: SourceFacts, *, careful: bool) -> Way | None:
    longest = max(packet_fwhm_m(facts, source) / READINGS_PER_PACKET, facts.resolution_m)
    spacing = _spacings(facts, source, longest)
    spacing = spacing[spacing >= facts.resolution_m]
    best = _best(facts, source, spacing, np.ones_like(spacing), careful=careful)
    if best is None:
        return None
    index, seen = best
    return _step(facts, source, float(spacing[index]), seen)


def _sweep(
    facts: BenchFacts, source: SourceFacts, spacing_m: float, left: float, seen: float
) -> Way:
    # Positions and readings come from two devices: their times agree to one reading, evenly spread.
    jitter = spacing_m / math.sqrt(12.0)
    per_fringe = source.mean_wavelength_m / abs(facts.opd_per_m) / spacing_m
    return Way(
        mode="sweep",
        speed_m_s=spacing_m * facts.rate_hz,
        increment_m=None,
        spacing_m=spacing_m,
        detection_probability=seen,
        sd_m=locating_sd_m(facts, source, spacing_m, left, jitter),
        amplitude_left=left,
        per_fringe=per_fringe,
        undersampled=per_fringe < 2.0,
    )


def _step(facts: BenchFacts, source: SourceFacts, spacing_m: float, seen: float) -> Way:
    per_fringe = source.mean_wavelength_m / abs(facts.opd_per_m) / spacing_m
    return Way(
        mode="step",
        speed_m_s=None,
        increment_m=spacing_m,
        spacing_m=spacing_m,
        detection_probability=seen,
        sd_m=locating_sd_m(facts, source, spacing_m, 1.0, 0.0),
        amplitude_left=1.0,
        per_fringe=per_fringe,
        undersampled=per_fringe < 2.0,
    )


@lru_cache(maxsize=256)
def final_way(facts: BenchFacts, source: SourceFacts, window_m: float) -> Way:
    """How to scan the last window: finely, with little blur, and as long as it needs.

    Eight readings a fringe, more where the acceptance limit asks for a better zero than they give,
    fewer (never below three) where they would take more than two minutes.
    """
    fringe = source.mean_wavelength_m / abs(facts.opd_per_m)
    goal_m = facts.accept_residual_opd_m / GOAL_PARTS / abs(facts.opd_per_m)
    chosen: Way | None = None
    for per_fringe in (8.0, 12.0, 16.0, 24.0, 32.0, 48.0, 64.0):
        way = _final(facts, source, fringe / per_fringe)
        if chosen is not None and window_m * way.time_per_metre(facts) > FINAL_PATIENCE_S:
            break
        chosen = way
        if way.sd_m <= goal_m:
            break
    assert chosen is not None
    for per_fringe in (6.0, 4.0, 3.0):
        if window_m * chosen.time_per_metre(facts) <= FINAL_PATIENCE_S:
            break
        chosen = _final(facts, source, fringe / per_fringe)
    return chosen


def _final(facts: BenchFacts, source: SourceFacts, spacing_m: float) -> Way:
    """Sweep or step at that spacing, whichever is quicker; a sweep no faster than blur allows."""
    # |sinc(x)| is about 1 - (pi x)^2 / 6 near nothing.
    turn = math.sqrt(6.0 * (1.0 - FINAL_FRINGE_LEFT)) / math.pi
    speed = min(spacing_m * facts.rate_hz, facts.speed_m_s)
    if facts.integration_s > 0.0:
        blurred = source.mean_wavelength_m * turn / (abs(facts.opd_per_m) * facts.integration_s)
        speed = min(speed, blurred)
    left = float(_blur(facts, source, np.array([speed]))[0])
    swept = speed / facts.rate_hz
    stepped = max(spacing_m, facts.resolution_m)
    width = packet_fwhm_m(facts, source)
    amplitude = source.signal * np.array([left, 1.0])
    seen = detection(amplitude, facts.noise, width / np.array([swept, stepped]))
    ways = (
        _sweep(facts, source, swept, left, min(float(seen[0]), BEST_DETECTION)),
        _step(facts, source, stepped, min(float(seen[1]), BEST_DETECTION)),
    )
    return min(ways, key=lambda way: way.time_per_metre(facts))
