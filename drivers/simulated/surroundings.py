"""A simulated source changer and climate sensor."""

from __future__ import annotations

import numpy as np

from drivers.contracts import Climate, DeviceRefused, Identity, NotConnected
from drivers.simulated.world import World

__all__ = ["SimulatedChanger", "SimulatedClimateSensor"]


class SimulatedChanger:
    """Turns one of the bench's sources into the interferometer within ``change_time_s``."""

    def __init__(self, world: World, *, change_time_s: float) -> None:
        self._world = world
        self._change_time_s = change_time_s
        self._open = True

    def identity(self, *, timeout_s: float) -> Identity:
        self._ask(timeout_s)
        return Identity("Evenarm", "simulated source changer", "SIM-CHANGER", simulated=True)

    def close(self) -> None:
        self._open = False

    def current(self, *, timeout_s: float) -> str | None:
        self._ask(timeout_s)
        return self._world.source

    def select(self, source: str, *, timeout_s: float) -> None:
        if source not in self._world.sources:
            raise DeviceRefused(f"there is no source {source!r}", device="changer")
        self._ask(timeout_s, 0.0 if source == self._world.source else self._change_time_s)
        self._world.hand_change(source)

    def _ask(self, timeout_s: float, takes_s: float = 0.0) -> None:
        if not self._open:
            raise NotConnected("the changer was closed", device="changer", mend="open it again")
        self._world.reach("changer", timeout_s=timeout_s, takes_s=takes_s)


class SimulatedClimateSensor:
    """Says what the world file says of the air."""

    def __init__(self, world: World) -> None:
        self._world = world
        self._open = True

    def identity(self, *, timeout_s: float) -> Identity:
        self._ask(timeout_s)
        return Identity("Evenarm", "simulated climate sensor", "SIM-CLIMATE", simulated=True)

    def close(self) -> None:
        self._open = False

    def read_climate(self, *, timeout_s: float) -> Climate:
        self._ask(timeout_s)
        return Climate(
            time_s=float(self._world.clock_s(np.asarray(self._world.time_s()))),
            temperature_c=self._world.value("climate.temperature") - 273.15,
            pressure_pa=self._world.value("climate.pressure"),
            relative_humidity=self._world.value("climate.humidity"),
        )

    def _ask(self, timeout_s: float) -> None:
        if not self._open:
            raise NotConnected("the sensor was closed", device="climate", mend="open it again")
        self._world.reach("climate", timeout_s=timeout_s)
