"""The simulated bench as entry points: one ``Driver`` for each kind of device."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from drivers.contracts import Context, DeviceRefused, Driver, Setting
from drivers.simulated.detector import SimulatedDetector
from drivers.simulated.settings import FAULTS, WORLD_SETTINGS
from drivers.simulated.stage import SimulatedStage
from drivers.simulated.surroundings import SimulatedChanger, SimulatedClimateSensor
from drivers.simulated.world import World

__all__ = ["CHANGER", "CLIMATE", "DETECTOR", "FAULTS", "STAGE"]

_CHANGE_TIME = Setting(
    "change_time", "s", "what a turn from one source to another takes", default=2.0, low=0.0
)
_MEMORY = Setting("memory", "int", "readings kept for a slow computer", default=2_000_000, low=1)


def _world(context: Context) -> World:
    """The world that all devices of this opening share. Raises DeviceRefused."""
    try:
        return World.of(context)
    except (KeyError, TypeError, ValueError) as error:
        raise DeviceRefused(
            f"the simulated bench cannot be built: {error}",
            device="simulated bench",
            mend="correct world.toml or bench.toml",
        ) from error


def _open_stage(settings: Mapping[str, Any], context: Context) -> SimulatedStage:
    stage = context.bench["stage"]
    return SimulatedStage(
        _world(context),
        speed_m_s=float(stage["speed_m_s"]),
        acceleration_m_s2=float(stage["acceleration_m_s2"]),
        resolution_m=float(stage.get("resolution_m") or 0.0),
    )


def _open_detector(settings: Mapping[str, Any], context: Context) -> SimulatedDetector:
    detector = context.bench["detector"]
    limits = detector.get("range")
    return SimulatedDetector(
        _world(context),
        unit=str(detector.get("unit") or "V"),
        rate_hz=float(detector["rate_hz"]),
        integration_s=float(detector["integration_s"]),
        dark=float(detector.get("dark") or 0.0),
        noise=float(detector.get("noise") or 0.0),
        lag_s=float(detector.get("lag_s") or 0.0),
        range_=(float(limits[0]), float(limits[1])) if limits is not None else None,
        memory=int(settings.get("memory") or 2_000_000),
    )


def _open_changer(settings: Mapping[str, Any], context: Context) -> SimulatedChanger:
    change_time_s = settings.get("change_time")
    return SimulatedChanger(
        _world(context), change_time_s=2.0 if change_time_s is None else float(change_time_s)
    )


def _open_climate(settings: Mapping[str, Any], context: Context) -> SimulatedClimateSensor:
    return SimulatedClimateSensor(_world(context))


STAGE = Driver(
    "simulated",
    "stage",
    "an axis with play, periodic error, limits and settling",
    _open_stage,
    simulated=True,
    capabilities=frozenset({"home"}),
    world=WORLD_SETTINGS,
    faults=FAULTS,
)
DETECTOR = Driver(
    "simulated",
    "detector",
    "a photodiode that sees fringes worked out from the spectrum of the source",
    _open_detector,
    settings=(_MEMORY,),
    simulated=True,
    capabilities=frozenset({"stream", "operator_selects"}),
    world=WORLD_SETTINGS,
    faults=FAULTS,
)
CHANGER = Driver(
    "simulated",
    "changer",
    "a motorised source changer",
    _open_changer,
    settings=(_CHANGE_TIME,),
    simulated=True,
    world=WORLD_SETTINGS,
    faults=FAULTS,
)
CLIMATE = Driver(
    "simulated",
    "climate",
    "temperature, pressure and humidity as the world file says",
    _open_climate,
    simulated=True,
    world=WORLD_SETTINGS,
    faults=FAULTS,
)
