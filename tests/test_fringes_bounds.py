"""The bounds, against published formulas and against a Fisher matrix of the model itself."""

from __future__ import annotations

import math

import numpy as np
import pytest

from bench.fringes.bounds import envelope_bound, fisher_bound, fringe_bound

# Fleischer, Windecker & Tiziani 2001, Appl. Opt. 40, 2815: a packet of wavelength 0.6 um, rms width
# 1 um, read every 0.075 um with noise of 2 % of its amplitude, all in OPD.
NOISE, AMPLITUDE, WIDTH, STEP, WAVELENGTH = 0.02, 1.0, 1.0, 0.075, 0.6


def gradient() -> np.ndarray:
    x = np.arange(-6.0, 6.0, STEP)
    envelope = np.exp(-(x**2) / 2.0 / WIDTH**2)
    turn = 2.0 * math.pi / WAVELENGTH * x + 0.4
    by_envelope = x / WIDTH**2 * envelope * np.cos(turn)
    return np.stack([by_envelope, -envelope * np.sin(turn), envelope * np.cos(turn)], axis=1)


def test_published_values() -> None:
    assert envelope_bound(NOISE, AMPLITUDE, WIDTH, STEP) == pytest.approx(8.23e-3, rel=1e-3)
    bright = fringe_bound(NOISE, AMPLITUDE, WIDTH, STEP, WAVELENGTH)
    assert bright == pytest.approx(0.555e-3, rel=2e-3)  # printed "about"


def test_ratio_of_the_two_bounds_is_two_pi_root_two_fringes_in_the_width() -> None:
    ratio = envelope_bound(NOISE, AMPLITUDE, WIDTH, STEP) / fringe_bound(
        NOISE, AMPLITUDE, WIDTH, STEP, WAVELENGTH
    )
    assert ratio == pytest.approx(2.0 * math.pi * WIDTH / WAVELENGTH * math.sqrt(2.0), rel=1e-12)


def test_fisher_matrix_of_the_model_gives_the_closed_form() -> None:
    numeric = fisher_bound(gradient(), NOISE)
    assert numeric[0] == pytest.approx(envelope_bound(NOISE, AMPLITUDE, WIDTH, STEP), rel=1e-6)


def test_noise_of_each_reading_may_differ() -> None:
    every = fisher_bound(gradient(), np.full(gradient().shape[0], NOISE))
    assert every == pytest.approx(fisher_bound(gradient(), NOISE))


@pytest.mark.parametrize("columns", [[0, 1, 1], [0, 0]])
def test_parameters_that_cannot_be_told_apart_are_an_error(columns: list[int]) -> None:
    with pytest.raises(ValueError, match="cannot be told"):
        fisher_bound(gradient()[:, columns], NOISE)


def test_a_parameter_without_effect_is_an_error() -> None:
    with pytest.raises(ValueError, match="does not change"):
        fisher_bound(np.zeros((10, 1)), NOISE)
