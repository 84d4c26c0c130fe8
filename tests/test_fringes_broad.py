"""White light between hard edges, glass in one arm, and scans that show no packet at all.

The scans are made by bench.optics, whose packets stand at OPD = -(n_g - 1) thickness; the index of
N-BK7 is that of the glass catalogue (tests of bench.optics compare it).
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from bench.fringes import Knowledge, Located, Scan, locate
from bench.optics import glass
from bench.optics.coherence import coherence_lengths
from bench.optics.interferogram import interferogram
from bench.optics.spectra import Spectrum, blackbody, gaussian

OPD_PER_X = 2.0
AT_M = 650e-9
HALOGEN = blackbody(3000.0, (420e-9, 900e-9))
FILTERED = gaussian(600e-9, 60e-9)


def light(spectrum: Spectrum) -> tuple[float, float]:
    bright = spectrum.wavenumber[spectrum.power > 0.01 * spectrum.power.max()]
    return float(bright[0]), float(bright[-1])


def scanned(
    thickness_m: float, seed: int, *, position_noise_m: float = 0.0, room: float = 5.0
) -> tuple[Scan, float]:
    """A scan of the halogen lamp and where its group zero is, in x."""
    draw = np.random.default_rng(seed)
    reach = room * coherence_lengths(HALOGEN).fwhm_m
    zero = draw.uniform(-0.1, 0.1) * reach
    opd = np.linspace(-reach, reach, int(2.0 * reach / HALOGEN.mean_wavelength_m * 8.0))
    shift = (float(glass.group_index("N-BK7", AT_M)) - 1.0) * thickness_m
    true = opd - zero - shift + draw.normal(0.0, OPD_PER_X * position_noise_m + 1e-15, opd.size)
    phase = draw.uniform(0.0, 2.0 * math.pi)
    fringes = interferogram(HALOGEN, true, glass="N-BK7", thickness_m=thickness_m, phase_rad=phase)
    signal = 0.8 + 0.48 * fringes + draw.normal(0.0, 0.005, opd.size)
    return Scan(opd / OPD_PER_X, signal, OPD_PER_X, dark=0.0), zero / OPD_PER_X


def halogen(**known: object) -> Knowledge:
    return Knowledge(band=HALOGEN.half_power_band, at_wavelength_m=AT_M, glass="N-BK7", **known)


class TestBroadHardEdgedLight:
    @pytest.mark.parametrize("thickness_m", [-0.1e-3, -0.03e-3, 0.0, 0.03e-3, 0.1e-3])
    @pytest.mark.parametrize("told", [True, False])
    def test_glass_does_not_move_the_zero(self, thickness_m: float, told: bool) -> None:
        known = halogen(light=light(HALOGEN)) if told else halogen()
        for seed in range(3):
            scan, zero = scanned(thickness_m, seed)
            located = locate(scan, known)
            assert located.zero is not None, located.reason
            assert located.zero.standard_uncertainty < 5e-9
            assert abs(located.zero.value - zero) < 3.0 * located.zero.standard_uncertainty
            assert located.residual_glass is not None
            found = located.residual_glass.thickness_m
            assert found is not None
            assert found.value == pytest.approx(thickness_m, abs=2e-6)

    def test_scattered_positions_are_covered(self) -> None:
        over = []
        for seed in range(16):
            scan, zero = scanned(0.03e-3 * (-1) ** seed, seed, position_noise_m=10e-9)
            located = locate(scan, halogen(light=light(HALOGEN)))
            assert located.zero is not None, located.reason
            over.append((located.zero.value - zero) / located.zero.standard_uncertainty)
        assert max(map(abs, over)) < 3.0
        assert 0.3 < math.sqrt(float(np.mean(np.square(over)))) < 1.3

    def test_a_cut_window_is_not_taken_for_half_a_packet(self) -> None:
        for seed in range(4):
            scan, zero = scanned(0.03e-3, seed, room=3.0)
            located = locate(scan, halogen(light=light(HALOGEN)))
            assert located.zero is not None, located.reason
            assert abs(located.zero.value - zero) < 3.0 * located.zero.standard_uncertainty


class TestNoPacketIsExplained:
    X = np.arange(-20e-6, 20e-6, 30e-9)

    def seen(self, signal: np.ndarray, *, known: bool = True, dark: float | None = 0.02) -> Located:
        knowledge = Knowledge(band=FILTERED.half_power_band if known else None)
        return locate(Scan(self.X[: signal.size], signal, OPD_PER_X, dark=dark), knowledge)

    def noise(self, sd: float = 0.005) -> np.ndarray:
        return np.random.default_rng(5).normal(0.0, sd, self.X.size)

    @pytest.mark.parametrize("known", [True, False])
    def test_a_constant_signal(self, known: bool) -> None:
        located = self.seen(np.full(self.X.size, 1.0), known=known)
        assert not located.found
        assert located.reason == "the signal is constant"

    def test_no_light(self) -> None:
        located = self.seen(0.02 + self.noise())
        assert located.reason == "no light: the detector sees only its dark level"

    def test_light_without_a_packet_is_not_called_dark(self) -> None:
        assert "no light" not in self.seen(0.2 + self.noise()).reason
        assert "no light" not in self.seen(0.02 + self.noise(), dark=None).reason

    @pytest.mark.parametrize("known", [True, False])
    def test_endless_fringes_are_not_their_own_noise(self, known: bool) -> None:
        line = np.cos(2.0 * math.pi * OPD_PER_X * self.X / 633e-9)
        located = self.seen(2.0 + 0.5 * line + self.noise(), known=known)
        assert not located.found
        assert math.isnan(located.noise)

    def test_a_packet_cut_by_the_end_says_so(self) -> None:
        told = 0
        for phase in (0.0, 1.5, 3.0):
            # as broad as to be seen only half, without a band to help
            opd = np.arange(-20e-6, 0.0, 60e-9)
            fringes = interferogram(FILTERED, opd, phase_rad=phase)
            signal = 0.8 + 0.48 * fringes + self.noise()[: opd.size]
            located = locate(Scan(opd / OPD_PER_X, signal, OPD_PER_X))
            words = located.reason + "".join(notice.message for notice in located.notices)
            told += "cut by the end of the scan" in words
            assert "wanders" not in words
        assert told == 3
