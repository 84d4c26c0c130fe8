"""The world behind a simulated bench: its seed, its sources, its surroundings, its declaration."""

from __future__ import annotations

import ast
import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import drivers.simulated
from drivers.clock import VirtualClock
from drivers.contracts import Context, DeviceRefused, Driver, NoReply
from drivers.simulated.detector import SimulatedDetector
from drivers.simulated.example import example_bench, example_context
from drivers.simulated.faults import Fault, Faults
from drivers.simulated.plugin import CHANGER, CLIMATE, DETECTOR, STAGE
from drivers.simulated.settings import FAULTS, WORLD_SETTINGS
from drivers.simulated.stage import SimulatedStage
from drivers.simulated.surroundings import SimulatedChanger, SimulatedClimateSensor
from drivers.simulated.world import World

RANDOM_WORLD: dict[str, Any] = {
    "truth.zero": (12e-3, 13e-3),
    "truth.phase": (0.0, 2.0 * math.pi),
    "truth.glass.material": "fused silica",
    "truth.glass.thickness": (-50e-6, 50e-6),
    "stage.reversal_error": (2e-6, 9e-6),
    "stage.position_noise": 5e-9,
    "detector.hum.amplitude": 3e-3,
    "source": [{"name": "white", "level": (1.0, 2.0)}],
}


def rehearsal(seed: int, *, nosy: bool = False) -> bytes:
    """A short run: everything that the devices said, as bytes."""
    context = example_context(example_bench(RANDOM_WORLD, seed=seed))
    # In either order: the world does not depend on who opens it.
    detector = DETECTOR.open({}, context) if nosy else None
    stage = STAGE.open({}, context)
    detector = detector or DETECTOR.open({}, context)
    assert isinstance(stage, SimulatedStage)
    assert isinstance(detector, SimulatedDetector)
    said: list[bytes] = []
    for target_m in (12.4e-3, 12.6e-3):
        stage.start_move(target_m, 1e-3, timeout_s=1.0)
        detector.start_stream(timeout_s=1.0)
        for _ in range(60):
            block = detector.take(0.1, timeout_s=1.0)
            if nosy:
                World.of(context).stream("somebody else's").standard_normal(9)
            state = stage.state(timeout_s=1.0)
            said += [block.time_s.tobytes(), block.signal.tobytes(), block.saturated.tobytes()]
            said.append(repr(state).encode())
        detector.stop_stream(timeout_s=1.0)
    return b"".join(said)


def test_the_same_seed_says_the_same_bytes() -> None:
    first = rehearsal(5)
    assert rehearsal(5) == first
    assert rehearsal(5, nosy=True) == first
    assert rehearsal(6) != first


def world(given: dict[str, Any], seed: int = 7) -> World:
    return World(example_bench(given, seed=seed), VirtualClock())


def test_a_key_more_changes_no_other_draw() -> None:
    few = {"truth.zero": (12e-3, 13e-3)}
    many = {
        "stage.reversal_error": (1e-6, 9e-6),
        "truth.phase": (0.0, 6.0),
        "truth.zero": (12e-3, 13e-3),
        "fault": [{"kind": "lamp out", "at": (1.0, 2.0)}],
    }
    for seed in range(20):
        assert world(few, seed).truth.zero_m == world(many, seed).truth.zero_m


def test_drawn_numbers_fill_their_range() -> None:
    zeros_m = np.asarray([world(RANDOM_WORLD, seed).truth.zero_m for seed in range(400)])
    phases = np.asarray([world(RANDOM_WORLD, seed).truth.phase_rad for seed in range(400)])
    share = (zeros_m - 12e-3) / 1e-3
    assert ((share >= 0.0) & (share <= 1.0)).all()
    # Kolmogorov's statistic of 400 draws exceeds 2.6 / sqrt(400) once in 400 000 sets (Kolmogorov
    # 1933: 2 exp(-2 x^2)).
    ranks = (np.arange(400) + 0.5) / 400
    assert np.abs(np.sort(share) - ranks).max() < 2.6 / 20.0
    assert abs(np.corrcoef(share, phases)[0, 1]) < 5.0 / 20.0


def test_faults_and_levels_may_be_drawn() -> None:
    drawn = world({**RANDOM_WORLD, "fault": [{"kind": "lamp out", "at": (1.0, 2.0), "lasts": 3.0}]})
    (fault,) = drawn.faults.of("lamp out")
    assert 1.0 <= fault.start_s <= 2.0
    assert fault.end_s == fault.start_s + 3.0
    assert 1.0 <= drawn.level("white") <= 2.0


def test_drift_moves_the_zero_the_other_way() -> None:
    truth = world({"drift.path": 20e-9 / 60.0}).truth
    moved_m = truth.group_zero_m(6e-7, 600.0) - truth.group_zero_m(6e-7)
    assert moved_m == pytest.approx(-200e-9 / (2.0 * 1.00027), rel=1e-6)


def test_glass_in_arm_a_moves_the_zero_by_its_group_delay() -> None:
    # 0.2 mm of N-BK7 at 0.55 um delay a packet by 109.24 um (catalogue dispersion formula).
    bench = example_bench({"truth.glass.material": "N-BK7", "truth.glass.thickness": 0.2e-3})
    for factor, sign in ((2.0, -1.0), (-2.0, 1.0)):
        truth = World({**bench, "path_factor": factor, "air_index": 1.0}, VirtualClock()).truth
        assert truth.glass_path_m(0.55e-6) == pytest.approx(109.24e-6, abs=5e-9)
        moved_m = truth.group_zero_m(0.55e-6) - truth.zero_m
        assert moved_m == pytest.approx(sign * 109.24e-6 / 2.0, abs=5e-9)


def opened() -> tuple[SimulatedDetector, SimulatedChanger, SimulatedClimateSensor, Context]:
    context = example_context(
        example_bench({"climate.temperature": 295.15, "climate.humidity": 0.4})
    )
    detector = DETECTOR.open({}, context)
    changer = CHANGER.open({"change_time": 4.0}, context)
    climate = CLIMATE.open({}, context)
    assert isinstance(detector, SimulatedDetector)
    assert isinstance(changer, SimulatedChanger)
    assert isinstance(climate, SimulatedClimateSensor)
    return detector, changer, climate, context


def test_sources_are_changed_by_hand_or_by_motor() -> None:
    detector, changer, _, context = opened()
    assert changer.current(timeout_s=1.0) == "white"
    changer.select("laser", timeout_s=9.0)
    assert context.clock.now_s() == pytest.approx(4.0)
    assert changer.current(timeout_s=1.0) == "laser"
    changer.select("laser", timeout_s=9.0)
    detector.operator_selects("white")
    assert changer.current(timeout_s=1.0) == "white"
    assert context.clock.now_s() == pytest.approx(4.0)
    with pytest.raises(DeviceRefused, match="laser"):
        detector.operator_selects("green")
    with pytest.raises(DeviceRefused):
        changer.select("green", timeout_s=9.0)
    with pytest.raises(NoReply):
        changer.select("laser", timeout_s=1.0)
    assert changer.current(timeout_s=1.0) == "white"


def test_each_source_has_fringes_of_its_own() -> None:
    detector, changer, _, context = opened()
    simulated = World.of(context)
    far_m = np.asarray([3e-3])
    assert simulated.packet("white").fringes(far_m)[0] == 0.0
    turned = [simulated.packet("laser").fringes(far_m, 0.5 * math.pi * k)[0] for k in range(2)]
    # exp(-pi x 1 GHz x 10 ps): closed form of a Lorentzian line.
    assert math.hypot(*turned) == pytest.approx(math.exp(-math.pi * 0.01), abs=2e-3)
    changer.select("laser", timeout_s=9.0)
    assert np.ptp(detector.read(50, timeout_s=1.0).signal) < 0.1


def test_climate_is_as_the_world_says() -> None:
    _, _, climate, _ = opened()
    air = climate.read_climate(timeout_s=1.0)
    assert air.temperature_c == pytest.approx(22.0)
    assert air.pressure_pa == 101325.0
    assert air.relative_humidity == 0.4


# --- faults and time -----------------------------------------------------------------------------


@given(
    st.lists(st.tuples(st.floats(0.0, 50.0), st.floats(0.0, 20.0)), max_size=5),
    st.lists(st.floats(0.0, 90.0), min_size=2, max_size=20),
)
@settings(max_examples=150, deadline=None)
def test_the_motor_s_time_never_runs_backward_nor_faster(
    stalls: list[tuple[float, float]], times_s: list[float]
) -> None:
    faults = Faults(Fault("stage stalled", at, at + lasts) for at, lasts in stalls)
    time_s = np.sort(np.asarray(times_s))
    motor_s = faults.motion_time_s(time_s)
    assert (np.diff(motor_s) >= -1e-9).all()
    assert (np.diff(motor_s) <= np.diff(time_s) + 1e-9).all()
    middle_s = 0.5 * (time_s[1:] + time_s[:-1])
    slow_s = faults.motion_time_s(middle_s + 1e-6) - faults.motion_time_s(middle_s)
    held = faults.during("stage stalled", middle_s) & faults.during(
        "stage stalled", middle_s + 1e-6
    )
    assert (slow_s[held] < 1e-9).all()


@given(st.lists(st.tuples(st.sampled_from(["sleep", "now"]), st.floats(-5.0, 5.0)), max_size=30))
def test_bench_time_never_runs_backward(calls: list[tuple[str, float]]) -> None:
    clock = VirtualClock(start_s=1.0)
    last_s = clock.now_s()
    for word, duration_s in calls:
        if word == "sleep":
            clock.sleep_s(duration_s)
        assert clock.now_s() >= last_s + (max(0.0, duration_s) if word == "sleep" else 0.0) - 1e-12
        last_s = clock.now_s()


@pytest.mark.parametrize("pace", [0.0, -1.0, math.nan])
def test_a_clock_needs_a_pace(pace: float) -> None:
    with pytest.raises(ValueError, match="pace"):
        VirtualClock(pace=pace)


# --- what is declared ----------------------------------------------------------------------------


def test_every_fault_is_described_and_can_be_declared() -> None:
    (kind,) = [setting for setting in WORLD_SETTINGS if setting.name == "fault[].kind"]
    assert kind.choices == tuple(FAULTS)
    for name, text in FAULTS.items():
        assert name in kind.choices
        assert len(text) > 20
        assert world({"fault": [{"kind": name, "at": 1.0}]}).faults.of(name)


@pytest.mark.parametrize("driver", [STAGE, DETECTOR, CHANGER, CLIMATE], ids=lambda d: d.kind)
def test_a_driver_explains_every_fault_that_its_world_allows(driver: Driver) -> None:
    (kind,) = [setting for setting in driver.world if setting.name == "fault[].kind"]
    assert set(driver.faults) == set(kind.choices)
    assert all(text and "\n" not in text for text in driver.faults.values())
    assert len({driver, driver}) == 1  # what is declared can still be compared and kept in a set


def test_a_world_that_cannot_be_is_refused_with_a_reason() -> None:
    bench = example_bench({"fault": [{"kind": "earthquake", "at": 1.0}]})
    with pytest.raises(DeviceRefused, match="earthquake"):
        STAGE.open({}, example_context(bench))
    bench = example_bench()
    bench["world"] = {}
    with pytest.raises(DeviceRefused, match=r"truth\.zero"):
        DETECTOR.open({}, example_context(bench))
    bench = example_bench()
    bench["sources"][0]["spectrum"]["shape"] = "square"
    with pytest.raises(DeviceRefused, match="square"):
        STAGE.open({}, example_context(bench))


def test_the_world_reads_no_key_that_it_does_not_declare() -> None:
    declared = {setting.name for setting in WORLD_SETTINGS}
    folder = Path(drivers.simulated.__file__).parent
    read = set()
    for path in folder.glob("*.py"):
        for node in ast.walk(ast.parse(path.read_text())):
            if (
                isinstance(node, ast.Call)
                and isinstance(node.func, ast.Attribute)
                and node.func.attr == "value"
                and isinstance(node.args[0], ast.Constant)
            ):
                read.add(node.args[0].value)
    assert len(read) > 15
    assert read <= declared


def test_the_simulated_bench_shares_nothing_with_the_program() -> None:
    folder = Path(drivers.simulated.__file__).parent
    for path in folder.glob("*.py"):
        for node in ast.walk(ast.parse(path.read_text())):
            names = []
            if isinstance(node, ast.ImportFrom):
                names = [node.module or ""]
            elif isinstance(node, ast.Import):
                names = [alias.name for alias in node.names]
            assert not [name for name in names if name.split(".")[0] in {"bench", "scipy"}]
