"""How near to the bound the zero is located, how honest its uncertainty is, and what is refused.

    python tests/benchmarks/locating.py [--scans N] [--seed S]

Scans are made by direct integration over a spectrum, with none of the estimator's own formulas.
The bound is the Cramer-Rao bound with level, amplitude, phase and zero unknown and the envelope's
shape known, so no estimate can beat it and a free spectrum has to pay a little. Where positions are
noisy it takes their noise as small against a fringe, which flatters the bound about twofold.
"""

from __future__ import annotations

import argparse
import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from bench.fringes import Knowledge, Scan, locate
from bench.fringes.bounds import fisher_bound

FloatArray = NDArray[np.float64]
AIR = 1.00027
FACTOR = 2.0
RATE_HZ = 1000.0
# N-BK7, Sellmeier coefficients of the maker's catalogue; wavelength in um
SELLMEIER = ((1.03961212, 0.00600069867), (0.231792344, 0.0200179144), (1.01046945, 103.560653))


def glass_index(wavelength_m: FloatArray | float) -> FloatArray:
    square = (np.asarray(wavelength_m) * 1e6) ** 2
    return np.sqrt(1.0 + sum(b * square / (square - c) for b, c in SELLMEIER))


def glass_group_index(wavelength_m: float, step_m: float = 1e-10) -> float:
    above, below = glass_index(wavelength_m + step_m), glass_index(wavelength_m - step_m)
    return float(glass_index(wavelength_m) - wavelength_m * (above - below) / (2.0 * step_m))


@dataclass(frozen=True)
class Light:
    """A source, Gaussian per wavenumber with half-power points at centre +- fwhm / 2."""

    centre_m: float
    fwhm_m: float

    @property
    def band(self) -> tuple[float, float]:
        return 1.0 / (self.centre_m + self.fwhm_m / 2), 1.0 / (self.centre_m - self.fwhm_m / 2)

    def fringes(
        self, opd_m: FloatArray, phase_rad: float, glass_m: float = 0.0, points: int = 241
    ) -> FloatArray:
        """Normalised fringes by summing cosines over the spectrum; far from zero they are zero."""
        low, high = self.band
        middle, width = 0.5 * (low + high), high - low
        wavenumber = np.linspace(middle - 2.2 * width, middle + 2.2 * width, points)
        power = np.exp(-4.0 * math.log(2.0) * ((wavenumber - middle) / width) ** 2)
        power /= power.sum()
        glass = 2.0 * math.pi * wavenumber * (glass_index(1.0 / wavenumber) - 1.0) * glass_m
        out = np.zeros_like(opd_m)
        shift = glass_m * (glass_group_index(self.centre_m) - 1.0)
        near = np.nonzero(np.abs(opd_m + shift) < 4.0 / width)[0]
        for part in np.array_split(near, max(1, near.size // 2000)):
            angle = 2.0 * math.pi * np.outer(opd_m[part], wavenumber) + glass + phase_rad
            out[part] = np.cos(angle) @ power
        return out


@dataclass(frozen=True)
class Case:
    """A kind of scan: how it is taken and what disturbs it. Lengths of stage reading in metres."""

    name: str
    light: Light
    step_m: float
    length_m: float
    noise: float
    jitter_m: float = 0.0
    hum: float = 0.0
    vibration_m: float = 0.0
    glass_m: float = 0.0
    margin: float = 0.3
    at_wavelength_m: float | None = None

    def draw(self, rng: np.random.Generator) -> tuple[Scan, Knowledge, float, float]:
        """A scan, what is known, the true group zero and the bound on its standard deviation."""
        x = np.arange(0.0, self.length_m, self.step_m)
        zero = self.length_m * rng.uniform(self.margin, 1.0 - self.margin)
        at = self.at_wavelength_m or self.light.centre_m
        geometric = zero + (glass_group_index(at) - 1.0) * self.glass_m / (AIR * FACTOR)
        phase = rng.uniform(-math.pi, math.pi)

        def ideal(place: FloatArray, amplitude: float, angle: float, shift: float) -> FloatArray:
            opd = AIR * FACTOR * (place - geometric - shift)
            return amplitude * self.light.fringes(opd, angle, self.glass_m)

        time_s = np.arange(x.size) / RATE_HZ
        moved = x + rng.normal(0.0, self.jitter_m, x.size) if self.jitter_m else x
        turn = rng.uniform(0.0, 2.0 * math.pi, 2)
        moved = moved + self.vibration_m / FACTOR * np.cos(2 * math.pi * 37.0 * time_s + turn[0])
        signal = 2.0 + ideal(moved, 1.0, phase, 0.0) + rng.normal(0.0, self.noise, x.size)
        signal += self.hum * np.cos(2.0 * math.pi * 50.0 * time_s + turn[1])
        tiny = 1e-10
        slope = (ideal(x, 1.0, phase, -tiny) - ideal(x, 1.0, phase, tiny)) / (2.0 * tiny)
        gradient = np.stack(
            [
                np.ones_like(x),
                ideal(x, 1.0, phase, 0.0),
                (ideal(x, 1.0, phase + 1e-4, 0.0) - ideal(x, 1.0, phase - 1e-4, 0.0)) / 2e-4,
                -slope * 1e-6,
            ],
            axis=1,
        )
        per_reading = np.hypot(self.noise, self.jitter_m * slope)
        bound = float(fisher_bound(gradient, per_reading)[-1]) * 1e-6
        order = rng.permutation(x.size) if rng.random() < 0.2 else np.arange(x.size)
        scan = Scan(x=x[order], signal=signal[order], opd_per_x=AIR * FACTOR, dark=0.0)
        glass = "N-BK7" if self.glass_m else None
        known = Knowledge(band=self.light.band, at_wavelength_m=self.at_wavelength_m, glass=glass)
        return scan, known, zero, bound


WHITE, FILTERED, NARROW = Light(600e-9, 60e-9), Light(550e-9, 10e-9), Light(550e-9, 2e-9)
CASES = (
    Case("fine, detector noise", WHITE, 20e-9, 30e-6, 0.005, at_wavelength_m=600e-9),
    Case("fine, position noise", WHITE, 20e-9, 30e-6, 0.005, 15e-9, at_wavelength_m=600e-9),
    Case("fine, hum", WHITE, 20e-9, 30e-6, 0.005, 0.0, 0.01, at_wavelength_m=600e-9),
    Case("fine, vibration", WHITE, 20e-9, 30e-6, 0.005, 0.0, 0.0, 8e-9, at_wavelength_m=600e-9),
    Case(
        "fine, everything and glass",
        WHITE,
        20e-9,
        36e-6,
        0.005,
        15e-9,
        0.01,
        8e-9,
        5e-5,
        at_wavelength_m=600e-9,
    ),
    Case("coarse 10 nm", FILTERED, 1e-6, 1e-3, 0.025, margin=0.06),
    Case("coarse 10 nm, weak", FILTERED, 1e-6, 1e-3, 0.1, margin=0.06),
    Case("coarse 10 nm, position noise", FILTERED, 1e-6, 1e-3, 0.02, 15e-9, margin=0.06),
    Case("coarse 2 nm", NARROW, 2e-6, 4e-3, 0.025, margin=0.06),
)


# --- peers on the same scans ---------------------------------------------------------------------


def highest_sample(scan: Scan, known: Knowledge) -> float:
    return float(scan.x[np.argmax(np.abs(scan.signal - np.median(scan.signal)))])


def _analytic(scan: Scan) -> tuple[FloatArray, NDArray[np.complex128]]:
    order = np.argsort(scan.x)
    x, y = scan.x[order], scan.signal[order]
    spectrum = np.fft.fft(y - y.mean())
    spectrum[y.size // 2 :] = 0.0
    return x, np.fft.ifft(2.0 * spectrum)


def envelope_fit(scan: Scan, known: Knowledge) -> float:
    """A parabola through the logarithm of the Hilbert envelope above half its maximum."""
    x, analytic = _analytic(scan)
    size = np.abs(analytic)
    top = int(np.argmax(size))
    near = (size > 0.5 * size[top]) & (np.abs(np.arange(x.size) - top) < 200)
    u = (x[near] - x[top]) / (x[1] - x[0])
    a, b, _ = np.polyfit(u, np.log(size[near]), 2, w=size[near])
    return float(x[top] - b / (2.0 * a) * (x[1] - x[0]))


def phase_slope(scan: Scan, known: Knowledge) -> float:
    """Slope of the transform's phase over the half-power band, weighted by power."""
    x, analytic = _analytic(scan)
    start = x[int(np.argmax(np.abs(analytic)))]
    assert known.band is not None
    low, high = (edge * AIR * FACTOR for edge in known.band)
    frequency = np.linspace(low, high, 60)
    transform = np.exp(-2j * np.pi * np.outer(frequency, x - start)) @ (
        scan.signal[np.argsort(scan.x)] - scan.signal.mean()
    )
    slope = np.polyfit(frequency, np.unwrap(np.angle(transform)), 1, w=np.abs(transform))[0]
    return float(start - slope / (2.0 * math.pi))


PEERS: dict[str, Callable[[Scan, Knowledge], float]] = {
    "highest sample": highest_sample,
    "envelope": envelope_fit,
    "phase slope": phase_slope,
}


@dataclass(frozen=True)
class Score:
    """What many scans of one case say, in metres; ``wrong`` is beyond five uncertainties."""

    rmse_m: float
    bound_m: float
    ratio_upper: float
    coverage: float
    wrong: int
    missed: int
    peers: dict[str, float]


def score(case: Case, scans: int, rng: np.random.Generator, *, peers: bool = False) -> Score:
    errors, sigmas, bounds, missed = [], [], [], 0
    others: dict[str, list[float]] = {name: [] for name in PEERS}
    for _ in range(scans):
        scan, known, zero, bound = case.draw(rng)
        located = locate(scan, known)
        if not located.found or located.zero is None:
            missed += 1
            continue
        errors.append(located.zero.value - zero)
        sigmas.append(located.zero.standard_uncertainty)
        bounds.append(bound)
        if peers and case.step_m < 1e-7:
            for name, peer in PEERS.items():
                others[name].append(peer(scan, known) - zero)
    error, sigma, best = np.array(errors), np.array(sigmas), np.array(bounds)
    relative = float(np.sqrt(np.mean((error / best) ** 2)))
    # chi-square of many degrees is nearly normal: the rms has a relative sd of 1/sqrt(2 n)
    upper = relative * (1.0 + 1.645 / math.sqrt(2.0 * error.size))
    return Score(
        rmse_m=float(np.sqrt(np.mean(error**2))),
        bound_m=float(np.sqrt(np.mean(best**2))),
        ratio_upper=upper,
        coverage=float(np.mean(np.abs(error) < 1.96 * sigma)),
        wrong=int(np.sum(np.abs(error) > 5.0 * sigma)),
        missed=missed,
        peers={
            name: float(np.sqrt(np.mean(np.square(row)))) for name, row in others.items() if row
        },
    )


# --- scans without a packet ----------------------------------------------------------------------

Disturbance = Callable[[FloatArray, np.random.Generator], FloatArray]


def _hum(x: FloatArray, rng: np.random.Generator) -> FloatArray:
    time_s = np.arange(x.size) / RATE_HZ
    return 0.1 * np.cos(2.0 * math.pi * rng.uniform(5.0, 490.0) * time_s + rng.uniform(0.0, 6.28))


def _laser(x: FloatArray, rng: np.random.Generator) -> FloatArray:
    wavelength_m = rng.uniform(500e-9, 700e-9)
    moved = x + rng.normal(0.0, rng.choice([0.0, 15e-9]), x.size)
    return np.cos(2.0 * math.pi * AIR * FACTOR * moved / wavelength_m + rng.uniform(0.0, 6.28))


def _fading_laser(x: FloatArray, rng: np.random.Generator) -> FloatArray:
    along = 2.0 * math.pi * rng.uniform(0.3, 1.5) * (x - x[0]) / (x[-1] - x[0])
    return _laser(x, rng) * (1.0 + 0.5 * np.cos(along + rng.uniform(0.0, 6.28)))


def _bumps(x: FloatArray, rng: np.random.Generator) -> FloatArray:
    span, out = x[-1] - x[0], np.zeros_like(x)
    for _ in range(4):
        width = span * 10.0 ** rng.uniform(-1.7, -0.7)
        out += rng.normal() * np.exp(-(((x - rng.choice(x)) / width) ** 2))
    return out


def _spikes(x: FloatArray, rng: np.random.Generator) -> FloatArray:
    size = rng.exponential(0.5, x.size) * rng.choice([-1.0, 1.0], x.size)
    return np.where(rng.random(x.size) < 0.01, size, 0.0)


def _burst(x: FloatArray, rng: np.random.Generator) -> FloatArray:
    out, start = np.zeros_like(x), int(rng.integers(0, x.size - 60))
    out[start : start + 40] = rng.normal(0.0, 0.2, 40)
    return out


WITHOUT: dict[str, Disturbance] = {
    "white noise": lambda x, rng: np.zeros_like(x),
    "random walk": lambda x, rng: np.cumsum(rng.normal(0.0, 0.01, x.size)),
    "spikes": _spikes,
    "lamp step": lambda x, rng: rng.uniform(0.05, 1.0) * (x > rng.choice(x[20:-20])),
    "slow bumps": _bumps,
    "hum": _hum,
    "laser": _laser,
    "fading laser": _fading_laser,
    "noise burst": _burst,
}


def false_alarms(
    kind: str, light: Light, scans: int, rng: np.random.Generator, *, blind: bool = False
) -> int:
    """How many of ``scans`` scans without a packet are said to have one."""
    fine = light.fwhm_m > 20e-9
    x = np.arange(-15e-6, 15e-6, 20e-9) if fine else np.arange(0.0, 2e-3, 1e-6)
    found = 0
    for _ in range(scans):
        signal = 2.0 + WITHOUT[kind](x, rng) + rng.normal(0.0, 0.01, x.size)
        known = Knowledge() if blind else Knowledge(band=light.band)
        found += locate(Scan(x=x, signal=signal, opd_per_x=AIR * FACTOR), known).found
    return found


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--scans", type=int, default=200)
    parser.add_argument("--seed", type=int, default=1)
    given = parser.parse_args()
    rng = np.random.default_rng(given.seed)
    head = f"{'scans with a packet':30} {'rmse nm':>8} {'bound':>8} {'ratio<':>7} {'cover':>6}"
    print(head, f"{'>5u':>4} {'missed':>6}  peers' rmse in nm")
    for case in CASES:
        s = score(case, given.scans, rng, peers=True)
        row = f"{case.name:30} {s.rmse_m * 1e9:8.2f} {s.bound_m * 1e9:8.2f} {s.ratio_upper:7.2f}"
        row += f" {s.coverage:6.3f} {s.wrong:4d} {s.missed:6d}  "
        print(row + ", ".join(f"{name} {rmse * 1e9:.1f}" for name, rmse in s.peers.items()))
    print(f"\n{'without (of ' + str(given.scans) + ')':30} {'fine':>8} {'coarse':>8} {'blind':>8}")
    for kind in WITHOUT:
        fine = false_alarms(kind, WHITE, given.scans, rng)
        coarse = false_alarms(kind, FILTERED, given.scans, rng)
        blind = false_alarms(kind, WHITE, given.scans, rng, blind=True)
        print(f"{kind:30} {fine:8d} {coarse:8d} {blind:8d}", flush=True)


if __name__ == "__main__":
    main()
