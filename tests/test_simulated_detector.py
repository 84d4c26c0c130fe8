"""The simulated photodiode: fringes over the stage, statistics, streams and faults.

Statistical bounds are five standard errors wide unless said otherwise: a right detector would fall
outside once in two million seeds, and the seeds are fixed.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from drivers.contracts import (
    Block,
    Context,
    DeviceRefused,
    NoReply,
    NotConnected,
    ReadingInvalid,
)
from drivers.simulated.detector import SimulatedDetector
from drivers.simulated.example import example_bench, example_context
from drivers.simulated.plugin import DETECTOR, STAGE
from drivers.simulated.stage import SimulatedStage
from drivers.simulated.world import World

FloatArray = NDArray[np.float64]
ZERO_M = 13.2184e-3
AIR = 1.00027
QUIET = {"detector.noise": 0.0, "detector.adc_bits": 32}


def opened(
    world: dict[str, Any] | None = None, *, seed: int = 7, memory: int = 2_000_000, **changes: Any
) -> tuple[SimulatedStage, SimulatedDetector, Context]:
    context = example_context(example_bench(world, seed=seed, **changes))
    stage = STAGE.open({}, context)
    detector = DETECTOR.open({"memory": memory}, context)
    assert isinstance(stage, SimulatedStage)
    assert isinstance(detector, SimulatedDetector)
    return stage, detector, context


def sweep(
    stage: SimulatedStage,
    detector: SimulatedDetector,
    context: Context,
    ends_m: tuple[float, float],
    speed_m_s: float,
) -> tuple[FloatArray, Block]:
    """Positions by the stage's own account and readings of a sweep, without the ramps."""
    world = World.of(context)
    stage.start_move(ends_m[0], 1e-3, timeout_s=1.0)
    while stage.state(timeout_s=1.0).moving:
        context.clock.sleep_s(0.01)
    context.clock.sleep_s(0.1)
    stage.start_move(ends_m[1], speed_m_s, timeout_s=1.0)
    begun_s = context.clock.now_s()
    detector.start_stream(timeout_s=1.0)
    duration_s = world.path.rest_s - world.time_s()
    block = detector.take(duration_s, timeout_s=duration_s + 1.0)
    detector.stop_stream(timeout_s=1.0)
    sign = 1.0 if ends_m[1] > ends_m[0] else -1.0
    ramp_s = speed_m_s / 1e-2
    reading_m = ends_m[0] + sign * speed_m_s * (block.time_s - begun_s - 0.5 * ramp_s)
    level = np.flatnonzero(
        (block.time_s > begun_s + ramp_s) & (block.time_s < begun_s + duration_s - ramp_s)
    )
    keep = slice(level[0], level[-1] + 1)
    return reading_m[keep], Block(block.time_s[keep], block.signal[keep], block.saturated[keep])


def gaussian_fringes(opd_m: FloatArray, phase_rad: float = 0.0) -> FloatArray:
    """Closed form for the example's white source: half-power points at 570 and 630 nm."""
    middle = 0.5 * (1.0 / 570e-9 + 1.0 / 630e-9)
    width = 1.0 / 570e-9 - 1.0 / 630e-9
    envelope = np.exp(-((math.pi * width * opd_m) ** 2) / (4.0 * math.log(2.0)))
    return np.asarray(envelope * np.cos(2.0 * math.pi * middle * opd_m + phase_rad))


@pytest.mark.parametrize("path_factor", [2.0, -2.0, 4.0])
def test_a_slow_sweep_shows_the_packet_where_it_is(path_factor: float) -> None:
    bench = example_bench({**QUIET, "truth.phase": 0.7, "truth.contrast": 0.5})
    bench["path_factor"] = path_factor
    context = example_context(bench)
    stage, detector = STAGE.open({}, context), DETECTOR.open({}, context)
    assert isinstance(stage, SimulatedStage)
    assert isinstance(detector, SimulatedDetector)
    reading_m, block = sweep(stage, detector, context, (ZERO_M - 9e-6, ZERO_M + 9e-6), 2e-6)
    expected = gaussian_fringes(AIR * path_factor * (reading_m - ZERO_M), 0.7)
    # The stage moves 0.4 nm within a reading: nothing to see of it.
    np.testing.assert_allclose(block.signal, 0.02 + 2.0 * (1.0 + 0.5 * expected), atol=3e-4)
    assert not block.saturated.any()
    assert np.abs(expected).max() > 0.8


def test_expected_signal_is_the_amplitude_and_level_follows_from_contrast() -> None:
    stage, detector, context = opened({**QUIET, "truth.contrast": 0.6})
    stage.start_move(ZERO_M, 1e-3, timeout_s=1.0)
    context.clock.sleep_s(20.0)
    top = detector.read(1, timeout_s=1.0).signal[0]
    assert top == pytest.approx(0.02 + 1.0 / 0.6 + 1.0, abs=2e-4)


def test_the_world_may_say_the_level() -> None:
    _, detector, _ = opened({**QUIET, "source": [{"name": "white", "level": 2.0}]})
    assert detector.read(1, timeout_s=1.0).signal[0] == pytest.approx(2.02, abs=1e-4)


@pytest.mark.parametrize("share", [0.25, 0.5, 1.5])
def test_motion_within_a_reading_lowers_the_fringes(share: float) -> None:
    # Mean of a cosine over a stretch of x waves: sinc(x), from the definition.
    wavenumber = 1.0 / 632.991e-9
    integration_s = 1e-3
    speed_m_s = share / (wavenumber * 2.0 * AIR * integration_s)
    stage, detector, context = opened(
        {**QUIET, "truth.contrast": 0.6},
        detector={"integration_s": integration_s, "rate_hz": 777.0},
    )
    detector.operator_selects("laser")
    reading_m, block = sweep(stage, detector, context, (13.0e-3, 13.4e-3), speed_m_s)
    angle = 2.0 * math.pi * wavenumber * 2.0 * AIR * (reading_m - ZERO_M)
    basis = np.stack([np.ones_like(angle), np.cos(angle), np.sin(angle)], axis=1)
    (_, amplitude, quadrature), *_ = np.linalg.lstsq(basis, block.signal, rcond=None)
    # A line of 1 GHz keeps 1 - 4e-3 of its contrast within 0.4 mm.
    assert amplitude == pytest.approx(np.sinc(share), abs=5e-3)
    assert abs(quadrature) < 2e-3


def test_averaging_agrees_with_a_fine_sum_over_the_integration() -> None:
    world = {
        **QUIET,
        "vibration.amplitude": 60e-9,
        "vibration.frequency": 400.0,
        "drift.path": 1e-6,
        "stage.reversal_error": 5e-6,
        "stage.periodic_error.amplitude": 0.2e-6,
    }
    stage, detector, context = opened(world, detector={"integration_s": 1e-3})
    simulated = World.of(context)
    _, block = sweep(stage, detector, context, (ZERO_M + 8e-6, ZERO_M - 20e-6), 1e-4)
    within_s = (np.arange(400) + 0.5) / 400 * 1e-3 - 0.5e-3
    opd_m = simulated.opd_m(block.time_s[:, None] + within_s)
    light = 1.0 / 0.6 * (1.0 + 0.6 * gaussian_fringes(opd_m).mean(axis=1))
    np.testing.assert_allclose(block.signal, 0.02 + light, atol=2e-4)


def test_glass_drift_and_phase_move_the_packet_as_the_truth_says() -> None:
    world = {
        **QUIET,
        "truth.glass.material": "N-BK7",
        "truth.glass.thickness": 50e-6,
        "drift.path": 20e-9,
        "truth.phase": 2.0,
        "stage.scale_error": 1e-4,
    }
    stage, detector, context = opened(world)
    truth = World.of(context).truth
    middle_m = 2.0 / (1.0 / 570e-9 + 1.0 / 630e-9)
    expected_m = truth.group_zero_m(middle_m)
    # 50 um of N-BK7 at 598.5 nm: (n_g - 1) t / 2 of stage, n_g 1.5406 (catalogue formula).
    assert expected_m - ZERO_M == pytest.approx(-0.5406 * 50e-6 / 2.0, rel=1e-3)
    reading_m, block = sweep(stage, detector, context, (expected_m - 9e-6, expected_m + 9e-6), 2e-6)
    power = (block.signal - np.median(block.signal)) ** 2
    power[power < 0.02 * power.max()] = 0.0
    centre_m = float(reading_m @ power / power.sum())
    when_s = float(block.time_s @ power / power.sum())
    assert truth.group_zero_m(middle_m, when_s) == pytest.approx(centre_m, abs=15e-9)
    assert truth.group_zero_m(middle_m, when_s) < expected_m - 80e-9
    assert truth.opd_at(centre_m, middle_m, when_s) == pytest.approx(0.0, abs=30e-9)
    assert truth.opd_at(truth.group_zero_m(7e-7, 3.0), 7e-7, 3.0) == pytest.approx(0.0, abs=1e-15)


def test_what_is_left_of_the_path_counts_how_the_stage_came_there() -> None:
    stage, _, context = opened({"stage.reversal_error": 8e-6})
    world = World.of(context)
    for target_m in (ZERO_M + 50e-6, ZERO_M):
        stage.start_move(target_m, 1e-3, timeout_s=1.0)
        context.clock.sleep_s(20.0)
    assert world.residual_opd_m(6e-7) == pytest.approx(2.0 * AIR * 8e-6, rel=1e-6)


def test_lag_shifts_a_sweep_by_lag_times_speed() -> None:
    lag_s, speed_m_s = 20e-3, 20e-6
    stage, detector, context = opened({**QUIET, "detector.lag": lag_s})
    for sign in (1.0, -1.0):
        ends_m = (ZERO_M - sign * 9e-6, ZERO_M + sign * 9e-6)
        reading_m, block = sweep(stage, detector, context, ends_m, speed_m_s)
        seen_m = reading_m - sign * speed_m_s * lag_s
        expected = gaussian_fringes(2.0 * AIR * (seen_m - ZERO_M))
        np.testing.assert_allclose(block.signal, 0.02 + (1.0 + 0.6 * expected) / 0.6, atol=1e-3)


def test_noise_has_the_standard_deviation_declared() -> None:
    _, detector, _ = opened({"detector.noise": 7e-3, "detector.adc_bits": 32})
    signal = detector.read(40_000, timeout_s=60.0).signal
    # The standard error of a standard deviation is 1 / sqrt(2 n) of it.
    assert np.std(signal, ddof=1) == pytest.approx(7e-3, rel=5.0 / math.sqrt(80_000))
    assert abs(np.mean(signal) - 0.02 - 1.0 / 0.6) < 5.0 * 7e-3 / 200.0
    neighbours = np.corrcoef(signal[1:], signal[:-1])[0, 1]
    assert abs(neighbours) < 5.0 / 200.0


def test_noise_is_what_the_bench_expects_unless_the_world_says() -> None:
    _, detector, _ = opened()
    signal = detector.read(10_000, timeout_s=60.0).signal
    assert np.std(signal, ddof=1) == pytest.approx(5e-3, rel=5.0 / math.sqrt(20_000))


def test_hum_has_its_frequency_and_amplitude() -> None:
    _, detector, _ = opened(
        {"detector.hum.frequency": 50.0, "detector.hum.amplitude": 10e-3, "detector.noise": 2e-3}
    )
    block = detector.read(20_000, timeout_s=60.0)
    turn = 2.0 * math.pi * 50.0 * block.time_s
    basis = np.stack([np.ones_like(turn), np.cos(turn), np.sin(turn)], axis=1)
    (_, cosine, sine), *_ = np.linalg.lstsq(basis, block.signal, rcond=None)
    # The standard error of a fitted amplitude is sd sqrt(2 / n).
    assert math.hypot(cosine, sine) == pytest.approx(10e-3, abs=5.0 * 2e-3 * math.sqrt(1e-4) + 2e-6)
    rest = block.signal - basis @ np.linalg.lstsq(basis, block.signal, rcond=None)[0]
    assert np.std(rest, ddof=3) == pytest.approx(2e-3, rel=5.0 / math.sqrt(40_000))


def test_hum_is_averaged_over_the_integration() -> None:
    _, detector, _ = opened(
        {**QUIET, "detector.hum.frequency": 50.0, "detector.hum.amplitude": 10e-3},
        detector={"rate_hz": 97.0, "integration_s": 5e-3},
    )
    signal = detector.read(9_700, timeout_s=200.0).signal
    # Mean of a sine over a quarter of its period: sinc(1/4) of the amplitude, from the definition.
    assert math.sqrt(2.0) * np.std(signal) == pytest.approx(10e-3 * np.sinc(0.25), rel=1e-3)


def test_converter_has_its_steps() -> None:
    _, detector, _ = opened({"detector.adc_bits": 8, "detector.noise": 0.1})
    signal = detector.read(20_000, timeout_s=60.0).signal
    counts = signal / (5.0 / 255.0)
    np.testing.assert_allclose(counts, np.rint(counts), atol=1e-9)
    # Rounding adds q^2 / 12 (Widrow and Kollar 2008, Quantization Noise, section 1.2).
    variance = 0.1**2 + (5.0 / 255.0) ** 2 / 12.0
    assert np.var(signal, ddof=1) == pytest.approx(variance, rel=5.0 * math.sqrt(2.0 / 20_000))
    # and moves no mean where the noise is wider than a step.
    assert np.mean(signal) == pytest.approx(0.02 + 1.0 / 0.6, abs=5.0 * 0.1 / math.sqrt(20_000))


def test_what_leaves_the_range_is_clipped_and_flagged() -> None:
    _, detector, _ = opened({"detector.noise": 1.0, "source": [{"name": "white", "level": 4.0}]})
    block = detector.read(4_000, timeout_s=60.0)
    assert block.signal.max() == 5.0
    assert block.signal.min() >= 0.0
    np.testing.assert_array_equal(block.saturated, (block.signal >= 5.0) | (block.signal <= 0.0))
    # One in six lies above 4.02 + 0.98 standard deviations (normal distribution).
    assert block.saturated.mean() == pytest.approx(0.1635, abs=5.0 * 0.37 / math.sqrt(4_000))


def test_position_noise_is_new_at_every_reading() -> None:
    stage, detector, context = opened(
        {**QUIET, "stage.position_noise": 5e-9, "truth.phase": 0.5 * math.pi}
    )
    stage.start_move(ZERO_M, 1e-3, timeout_s=1.0)
    context.clock.sleep_s(20.0)
    signal = detector.read(20_000, timeout_s=60.0).signal
    # At a quarter turn the signal follows the position: amplitude 2 pi sigma 2 n displacement.
    slope = 2.0 * math.pi * 0.5 * (1.0 / 570e-9 + 1.0 / 630e-9) * 2.0 * AIR
    assert np.std(signal) == pytest.approx(slope * 5e-9, rel=5.0 / math.sqrt(40_000) + 0.01)
    assert abs(np.corrcoef(signal[1:], signal[:-1])[0, 1]) < 5.0 / math.sqrt(20_000)


def test_vibration_has_the_amplitude_declared() -> None:
    stage, detector, context = opened(
        {
            **QUIET,
            "vibration.amplitude": 10e-9,
            "vibration.frequency": 37.0,
            "truth.phase": 0.5 * math.pi,
        }
    )
    stage.start_move(ZERO_M, 1e-3, timeout_s=1.0)
    context.clock.sleep_s(20.0)
    block = detector.read(10_000, timeout_s=60.0)
    slope = 2.0 * math.pi * 0.5 * (1.0 / 570e-9 + 1.0 / 630e-9)
    assert math.sqrt(2.0) * np.std(block.signal) == pytest.approx(slope * 10e-9, rel=5e-3)


def test_a_stream_loses_nothing_however_it_is_taken() -> None:
    _, detector, context = opened(QUIET)
    detector.start_stream(timeout_s=1.0)
    begun_s = context.clock.now_s()
    pauses_s = [0.0, 0.0001, 0.1, 0.0503, 0.0007, 0.2]
    blocks = []
    for pause_s in pauses_s:
        blocks.append(detector.take(pause_s, timeout_s=1.0))
        context.clock.sleep_s(0.0333)
    blocks.append(detector.take(0.0, timeout_s=1.0))
    times_s = np.concatenate([block.time_s for block in blocks])
    np.testing.assert_allclose(np.diff(times_s), 1e-3, atol=1e-9)
    assert times_s[0] == pytest.approx(begun_s + 0.1e-3)
    assert times_s[-1] + 0.1e-3 <= context.clock.now_s() + 1e-9
    assert times_s[-1] + 1.1e-3 > context.clock.now_s()
    detector.stop_stream(timeout_s=1.0)
    detector.stop_stream(timeout_s=1.0)
    with pytest.raises(DeviceRefused, match="no stream"):
        detector.take(0.1, timeout_s=1.0)


def test_a_memory_that_runs_over_says_so() -> None:
    _, detector, context = opened(memory=100)
    detector.start_stream(timeout_s=1.0)
    context.clock.sleep_s(0.5)
    with pytest.raises(ReadingInvalid, match="were lost"):
        detector.take(0.0, timeout_s=1.0)
    assert detector.take(0.01, timeout_s=1.0).signal.size == 10


def test_readings_begin_after_they_were_asked_for() -> None:
    _, detector, context = opened()
    context.clock.sleep_s(0.0123)
    asked_s = context.clock.now_s()
    block = detector.read(5, timeout_s=1.0)
    np.testing.assert_allclose(block.time_s, asked_s + 0.1e-3 + 1e-3 * np.arange(5), atol=1e-12)
    assert context.clock.now_s() >= block.time_s[-1] + 0.1e-3
    with pytest.raises(DeviceRefused):
        detector.read(0, timeout_s=1.0)
    with pytest.raises(NoReply):
        detector.read(10_000, timeout_s=1.0)


# --- faults --------------------------------------------------------------------------------------


def test_a_silent_detector_keeps_its_deadline_and_misses_its_readings() -> None:
    _, detector, context = opened({"fault": [{"kind": "detector silent", "at": 1.0, "lasts": 2.0}]})
    detector.start_stream(timeout_s=1.0)
    assert detector.take(0.5, timeout_s=1.0).signal.size == 500
    with pytest.raises(NoReply, match=r"0\.8 s"):
        detector.take(0.6, timeout_s=0.8)
    assert context.clock.now_s() == pytest.approx(1.3)
    context.clock.sleep_s(2.0)
    times_s = detector.take(0.0, timeout_s=1.0).time_s
    assert not ((times_s >= 1.0) & (times_s < 3.0)).any()
    assert times_s.size == pytest.approx(500 + 300, abs=2)


def test_a_saturated_detector_stands_at_its_end() -> None:
    _, detector, _ = opened({"fault": [{"kind": "detector saturated", "at": 0.1, "lasts": 0.1}]})
    block = detector.read(300, timeout_s=1.0)
    struck = (block.time_s >= 0.1) & (block.time_s < 0.2)
    assert (block.signal[struck] == 5.0).all()
    np.testing.assert_array_equal(block.saturated, struck)


def test_a_lamp_that_is_out_leaves_the_dark_level() -> None:
    _, detector, _ = opened({**QUIET, "fault": [{"kind": "lamp out", "at": 0.1}]})
    signal = detector.read(300, timeout_s=1.0).signal
    np.testing.assert_allclose(signal[150:], 0.02, atol=1e-6)
    assert (signal[:90] > 1.0).all()


def test_a_burst_of_vibration_shakes_while_it_lasts() -> None:
    fault = {"kind": "vibration burst", "at": 21.0, "lasts": 1.0, "amplitude": 5e-9}
    stage, detector, context = opened({**QUIET, "truth.phase": 1.5, "fault": [fault]})
    stage.start_move(ZERO_M, 1e-3, timeout_s=1.0)
    context.clock.sleep_s(20.0)
    block = detector.read(3_000, timeout_s=9.0)
    struck = (block.time_s >= 21.0) & (block.time_s < 22.0)
    slope = 2.0 * math.pi * 0.5 * (1.0 / 570e-9 + 1.0 / 630e-9)
    assert math.sqrt(2.0) * np.std(block.signal[struck]) == pytest.approx(slope * 5e-9, rel=0.02)
    assert np.ptp(block.signal[~struck]) < 1e-6


def test_a_fault_of_one_device_leaves_the_other() -> None:
    fault = {"kind": "unplugged", "at": 0.0, "device": "detector"}
    stage, detector, _ = opened({"fault": [fault]})
    stage.state(timeout_s=1.0)
    for call in (
        lambda: detector.read(1, timeout_s=1.0),
        lambda: detector.start_stream(timeout_s=1.0),
    ):
        with pytest.raises(NotConnected):
            call()
