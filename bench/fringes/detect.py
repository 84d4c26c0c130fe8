"""Is there a packet, and roughly where: the decision before the fit.

With a band known the readings are correlated with a packet of that band at every place. The
energy of the correlation over the scan is its own yardstick: in noise, hum or a laser's endless
fringes the largest energy stays within a factor of the usual one that grows only with the logarithm
of the number of independent places. A packet is an energy that leaves this behaviour behind, and
that many readings carry.

Without a band, short spectra of several lengths along the scan are searched for an energy that is
localised both in place and in frequency; its band is then measured and used as if it were known.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from bench.fringes.model import FloatArray
from bench.fringes.spectrum import demodulate

LOG2 = float(np.log(2.0))
ENVELOPE_FWHM = 4.0 * LOG2 / np.pi  # of a Gaussian packet times its half-power band: 0.8825

# What white noise supports: with a known band 1 scan of 15 000 was said to hold a packet, without
# one none of 3 000. The upper 95 % limits of these rates are the least that is ever claimed.
FLOOR_KNOWN = 5e-4
FLOOR_BLIND = 1e-3
ACCEPT = 1e-3
PURE = 100.0


@dataclass(frozen=True)
class Candidate:
    """The most packet-like place of a scan.

    ``excess`` is its energy over the usual energy of the scan; ``false_alarm`` the probability that
    noise alone shows as much somewhere in the scan; ``usual_amplitude`` the fringe amplitude that
    the usual energy corresponds to. ``steady``: fringes as strong run through the whole scan.
    """

    x: float
    low: float
    high: float
    width: float
    amplitude: float
    usual_amplitude: float
    excess: float
    places: float
    false_alarm: float
    steady: bool = False


def chance(excess: float, places: float, floor: float) -> float:
    """Probability of a normalised energy above ``excess`` at any of ``places`` independent places.

    Energies of band-limited normal noise are exponentially distributed; the yardstick is a median
    over the same places, so its own scatter widens the tail (as a ratio: Pareto instead of
    exponential), which matters for few places only.
    """
    if places < 1.0 or excess <= 0.0:
        return 1.0
    tail = (1.0 + excess / places) ** (-places)
    return float(min(1.0, max(-np.expm1(places * 4.0 * np.log1p(-min(tail, 0.999999))), floor)))


def search_band(
    x: FloatArray, signal: FloatArray, low: float, high: float, stretch: float = 1.0
) -> Candidate:
    """Correlate with a packet of the half-power band (low, high); ``x`` rising."""
    carrier = 0.5 * (low + high)
    width = ENVELOPE_FWHM / (high - low) * stretch
    width = min(width, 0.7 * float(x[-1] - x[0]))
    grid, z, weight2 = demodulate(x, signal, carrier, width)
    # A Gaussian of full width w, correlated with itself, is independent after about w.
    full = weight2 > 0.25 * np.median(weight2)
    energy = np.where(full, np.abs(z) ** 2 / np.maximum(weight2, 1e-9), 0.0)
    usual = float(np.median(energy[full])) / LOG2
    best = int(np.argmax(energy))
    places = max(1.0, float(full.sum()) / 8.0)
    excess = float(energy[best]) / max(usual, 1e-300)
    return Candidate(
        x=float(grid[best]),
        low=low,
        high=high,
        width=width,
        amplitude=float(2.0 * np.abs(z[best]) / max(weight2[best], 1e-9)),
        usual_amplitude=float(2.0 * np.sqrt(usual / max(float(np.median(weight2)), 1e-9))),
        excess=excess,
        places=places,
        false_alarm=chance(excess, places, FLOOR_KNOWN),
    )


def _everywhere(x: FloatArray) -> Candidate:
    """Fringes through the whole scan, and nothing else."""
    nan = float("nan")
    return Candidate(float(x[0]), nan, nan, nan, nan, nan, 0.0, 1.0, 1.0, steady=True)


def search_blind(x: FloatArray, signal: FloatArray) -> Candidate | None:
    """Find where energy is localised in place and frequency; ``x`` rising, None where nowhere.

    The readings are put on an even grid for this search only. The energy in each tile of place and
    frequency is weighted by frequency squared, which makes the slow wandering of lamps and
    random walks about as strong at all frequencies.
    """
    span = float(x[-1] - x[0])
    count = int(min(1 << 15, max(64, x.size)))
    even = np.linspace(x[0], x[-1], count)
    values = np.interp(even, x, signal)
    step = span / (count - 1)
    best: tuple[float, float, float, float, float, float, float] | None = None
    steady = 0.0  # energy a reading of the strongest frequency present nearly everywhere
    purity = 0.0  # of that frequency over the usual one
    length = 16
    while length <= count // 3:
        hop = max(1, length // 4)
        windows = np.lib.stride_tricks.sliding_window_view(values, length)[::hop]
        shape = np.hanning(length + 1)[:-1]
        ramp = np.linspace(-1.0, 1.0, length)
        weighted_ramp = shape * ramp
        windows = windows - (windows @ shape)[:, None] / shape.sum()
        windows = windows - ((windows @ weighted_ramp) / (weighted_ramp @ ramp))[:, None] * ramp
        power = np.abs(np.fft.rfft(windows * shape, axis=1)) ** 2 / np.sum(shape**2)
        cycles = np.arange(power.shape[1])
        usual = np.median(power, axis=0) / LOG2
        usual = np.maximum(usual, max(1e-12 * float(power.max()), 1e-300))
        # fewer than two cycles in a tile is level, not fringes; the last bins are beyond trust
        use = slice(2, max(3, int(0.8 * power.shape[1])))
        score = power[:, use] * (cycles[use] / length) ** 2
        throughout = np.percentile(score, 25, axis=0)
        pure = float(np.max(throughout)) / max(float(np.median(throughout)), 1e-300)
        if float(np.max(throughout)) / length > steady:
            steady, purity = float(np.max(throughout)) / length, pure
        excess = power[:, use] / usual[use]
        places = power.shape[0] / 2.0
        allowed = excess > 3.0 * np.log(4.0 * power.size)
        if bool(allowed.any()):
            flat = int(np.argmax(np.where(allowed, score, 0.0)))
            at, bin_ = np.unravel_index(flat, score.shape)
            value = float(score[at, bin_])
            strong = value / length
            if best is None or value > best[0]:
                best = (
                    value,
                    float(even[0] + step * (at * hop + 0.5 * (length - 1))),
                    float(cycles[use][bin_]) / (length * step),
                    length * step,
                    float(excess[at, bin_]),
                    places * power.shape[1],
                    strong,
                )
        length *= 2
    if best is None:
        return _everywhere(x) if purity > PURE else None
    _, place, frequency, width, excess_, places_, strong_ = best
    half = 0.75 / width
    return Candidate(
        x=place,
        low=max(frequency - half, 0.35 * frequency),
        high=frequency + half,
        width=width,
        amplitude=float("nan"),
        usual_amplitude=float("nan"),
        excess=excess_,
        places=places_,
        false_alarm=chance(excess_, places_, FLOOR_BLIND),
        steady=steady > 0.5 * strong_,
    )
