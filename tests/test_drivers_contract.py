"""What every registered driver must do; a new driver gets these tests by being registered.

All drivers have their declaration checked. Those that need no hardware are opened as well, on the
example bench, and must behave as the contract says.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import Any

import numpy as np
import pytest

from drivers.contracts import (
    KINDS,
    Camera,
    ClimateSensor,
    Context,
    Detector,
    Device,
    DeviceError,
    DeviceRefused,
    Driver,
    LimitReached,
    Setting,
    SourceChanger,
    Stage,
)
from drivers.registry import Available, available, load
from drivers.simulated.example import example_bench, example_context
from drivers.simulated.plugin import CHANGER, CLIMATE

PROTOCOLS: dict[str, type] = {
    "stage": Stage,
    "detector": Detector,
    "camera": Camera,
    "changer": SourceChanger,
    "climate": ClimateSensor,
}
WORDS = {"text", "bool", "int", "signal", ""}
TIMEOUT_S = 30.0


def label(value: object) -> str:
    if isinstance(value, Available):
        return f"{value.kind}-{value.name}"
    return f"{value.kind}-{value.name}" if isinstance(value, Driver) else str(value)


def drivers_that_can_be_tried() -> dict[str, Driver]:
    """All that are registered and need no hardware, and the shipped ones by their object."""
    found = {label(row): load(row.kind, row.name) for row in available()}
    for driver in (CHANGER, CLIMATE):
        found.setdefault(label(driver), driver)
    return {name: driver for name, driver in found.items() if driver.simulated}


SIMULATED = drivers_that_can_be_tried()


def of_kind(kind: str) -> list[Any]:
    return [pytest.param(d, id=n) for n, d in SIMULATED.items() if d.kind == kind]


# --- declarations --------------------------------------------------------------------------------


@pytest.mark.parametrize("row", available(), ids=label)
def test_declaration(row: Available) -> None:
    driver = load(row.kind, row.name)
    assert driver.kind in KINDS
    assert driver.summary
    assert not driver.summary.endswith(".")
    assert driver.simulated or not driver.world
    for settings in (driver.settings, driver.world):
        names = [setting.name for setting in settings]
        assert len(set(names)) == len(names)
        for setting in settings:
            check_setting(setting)


def check_setting(setting: Setting) -> None:
    assert setting.doc, setting.name
    assert setting.name == setting.name.strip().lower()
    assert not (setting.required and setting.default is not None)
    if setting.unit == "text":
        assert setting.low is None
        assert setting.high is None
        assert not setting.random
        assert setting.default is None or isinstance(setting.default, str)
    elif setting.unit == "bool":
        assert setting.default is None or isinstance(setting.default, bool)
    else:
        assert not setting.choices
        assert setting.unit in WORDS or setting.unit[0].isalpha()
    if setting.choices and setting.default is not None:
        assert setting.default in setting.choices
    if isinstance(setting.default, float | int) and not isinstance(setting.default, bool):
        assert setting.low is None or setting.default >= setting.low
        assert setting.high is None or setting.default <= setting.high


# --- every device --------------------------------------------------------------------------------


@pytest.fixture
def context() -> Context:
    return example_context()


@pytest.fixture
def opened(driver: Driver, context: Context) -> Iterator[Device]:
    device = driver.open({}, context)
    yield device
    device.close()


@pytest.mark.parametrize("driver", SIMULATED.values(), ids=label)
def test_says_who_it_is(driver: Driver, opened: Device) -> None:
    assert isinstance(opened, PROTOCOLS[driver.kind])
    identity = opened.identity(timeout_s=TIMEOUT_S)
    assert identity.simulated == driver.simulated
    assert identity.model
    assert identity.serial


@pytest.mark.parametrize("driver", SIMULATED.values(), ids=label)
def test_closing_is_idempotent_and_final(driver: Driver, opened: Device) -> None:
    opened.close()
    opened.close()
    with pytest.raises(DeviceError) as caught:
        opened.identity(timeout_s=TIMEOUT_S)
    assert caught.value.what
    assert caught.value.device


# --- stages --------------------------------------------------------------------------------------


def wait_for(stage: Stage, context: Context) -> float:
    for _ in range(100_000):
        state = stage.state(timeout_s=TIMEOUT_S)
        if not state.moving:
            assert state.known
            return state.position_m
        context.clock.sleep_s(0.01)
    raise AssertionError("the move does not end")


@pytest.mark.parametrize("driver", of_kind("stage"))
def test_stage_goes_where_it_is_told(driver: Driver, opened: Stage, context: Context) -> None:
    resolution_m = context.bench["stage"]["resolution_m"]
    for target_m in (10e-3, 10.5e-3, 10.4999e-3):
        opened.start_move(target_m, 1e-3, timeout_s=TIMEOUT_S)
        assert wait_for(opened, context) == pytest.approx(target_m, abs=resolution_m)


@pytest.mark.parametrize("driver", of_kind("stage"))
def test_stage_returns_at_once_and_tells_the_time(
    driver: Driver, opened: Stage, context: Context
) -> None:
    before_s = context.clock.now_s()
    opened.start_move(20e-3, 1e-3, timeout_s=TIMEOUT_S)
    assert context.clock.now_s() - before_s < 0.2
    last = opened.state(timeout_s=TIMEOUT_S)
    for _ in range(20):
        asked_s = context.clock.now_s()
        state = opened.state(timeout_s=TIMEOUT_S)
        assert asked_s <= state.time_s <= context.clock.now_s()
        assert state.time_s > last.time_s, "asking in a loop must let time pass"
        assert state.moving
        assert state.position_m >= last.position_m
        last = state
        context.clock.sleep_s(0.05)


@pytest.mark.parametrize("driver", of_kind("stage"))
def test_stage_stops_and_stops_again(driver: Driver, opened: Stage, context: Context) -> None:
    opened.stop(timeout_s=TIMEOUT_S)
    start_m = wait_for(opened, context)
    opened.start_move(start_m + 5e-3, 1e-3, timeout_s=TIMEOUT_S)
    context.clock.sleep_s(1.0)
    opened.stop(timeout_s=TIMEOUT_S)
    opened.stop(timeout_s=TIMEOUT_S)
    position_m = wait_for(opened, context)
    assert start_m < position_m < start_m + 2e-3
    context.clock.sleep_s(1.0)
    assert opened.state(timeout_s=TIMEOUT_S).position_m == position_m


@pytest.mark.parametrize("driver", of_kind("stage"))
@pytest.mark.parametrize("target_m", [-1.0, 1.0, math.nan, math.inf, -math.inf])
def test_stage_refuses_what_is_out_of_reach(
    driver: Driver, opened: Stage, context: Context, target_m: float
) -> None:
    before_m = wait_for(opened, context)
    # LimitReached is a DeviceRefused; a target that is no number need not be a limit.
    with pytest.raises(LimitReached if math.isfinite(target_m) else DeviceRefused):
        opened.start_move(target_m, 1e-3, timeout_s=TIMEOUT_S)
    context.clock.sleep_s(1.0)
    assert wait_for(opened, context) == before_m


@pytest.mark.parametrize("driver", of_kind("stage"))
def test_stage_comes_home(driver: Driver, opened: Stage, context: Context) -> None:
    begun_s = context.clock.now_s()
    opened.start_home(timeout_s=TIMEOUT_S)
    assert context.clock.now_s() - begun_s < 0.2
    while (state := opened.state(timeout_s=TIMEOUT_S)).moving:
        assert not state.known
        assert context.clock.now_s() - begun_s < 300.0
        context.clock.sleep_s(0.1)
    assert state.known
    low_m, high_m = context.bench["stage"]["travel_m"]
    assert low_m <= state.position_m <= high_m


# --- detectors -----------------------------------------------------------------------------------


@pytest.mark.parametrize("driver", of_kind("detector"))
@pytest.mark.parametrize("count", [1, 7, 500])
def test_detector_reads_as_many_as_asked(
    driver: Driver, opened: Detector, context: Context, count: int
) -> None:
    asked_s = context.clock.now_s()
    block = opened.read(count, timeout_s=TIMEOUT_S)
    assert opened.unit == context.bench["detector"]["unit"]
    assert block.time_s.shape == block.signal.shape == block.saturated.shape == (count,)
    assert block.time_s.dtype == block.signal.dtype == np.float64
    assert block.saturated.dtype == np.bool_
    assert np.isfinite(block.signal).all()
    assert (np.diff(block.time_s) > 0.0).all()
    assert asked_s < block.time_s[0]
    assert block.time_s[-1] <= context.clock.now_s()


@pytest.mark.parametrize("driver", of_kind("detector"))
def test_detector_streams_at_its_rate(driver: Driver, opened: Detector, context: Context) -> None:
    opened.start_stream(timeout_s=TIMEOUT_S)
    blocks = [opened.take(0.2, timeout_s=TIMEOUT_S) for _ in range(5)]
    opened.stop_stream(timeout_s=TIMEOUT_S)
    opened.stop_stream(timeout_s=TIMEOUT_S)
    times_s = np.concatenate([block.time_s for block in blocks])
    rate_hz = context.bench["detector"]["rate_hz"]
    assert times_s.size == pytest.approx(rate_hz * 1.0, abs=2)
    np.testing.assert_allclose(np.diff(times_s), 1.0 / rate_hz, rtol=1e-6)
    opened.start_stream(timeout_s=TIMEOUT_S)
    again = opened.take(0.1, timeout_s=TIMEOUT_S)
    assert again.time_s[0] > times_s[-1]


@pytest.mark.parametrize("driver", of_kind("detector"))
def test_detector_keeps_its_deadline(driver: Driver, opened: Detector, context: Context) -> None:
    begun_s = context.clock.now_s()
    with pytest.raises(DeviceError):
        opened.read(100_000, timeout_s=0.5)
    assert context.clock.now_s() - begun_s <= 0.5 + 1e-9


# --- surroundings --------------------------------------------------------------------------------


@pytest.mark.parametrize("driver", of_kind("changer"))
def test_changer_turns_to_each_source(
    driver: Driver, opened: SourceChanger, context: Context
) -> None:
    for source in [item["name"] for item in example_bench()["sources"]]:
        opened.select(source, timeout_s=300.0)
        assert opened.current(timeout_s=TIMEOUT_S) in {source, None}
    with pytest.raises(DeviceError):
        opened.select("no such source", timeout_s=300.0)


@pytest.mark.parametrize("driver", of_kind("climate"))
def test_climate_is_of_this_planet(driver: Driver, opened: ClimateSensor, context: Context) -> None:
    air = opened.read_climate(timeout_s=TIMEOUT_S)
    assert -40.0 < air.temperature_c < 60.0
    assert 3e4 < air.pressure_pa < 1.2e5
    assert 0.0 <= air.relative_humidity <= 1.0


def test_every_kind_that_ships_is_tried() -> None:
    assert {driver.kind for driver in SIMULATED.values()} >= {
        "stage",
        "detector",
        "changer",
        "climate",
    }
