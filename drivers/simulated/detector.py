"""A simulated photodiode with its converter."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from drivers.contracts import (
    Block,
    DeviceRefused,
    Identity,
    NoReply,
    NotConnected,
    ReadingInvalid,
)
from drivers.simulated.world import World

__all__ = ["SimulatedDetector"]

FloatArray = NDArray[np.float64]


class SimulatedDetector:
    """Reads the light of ``world``: level, fringes, dark level, hum, noise, converter.

    ``range_`` is the converter's, in ``unit``; None for one that neither clips nor rounds.
    ``memory`` readings are kept for a slow caller of ``take``.
    """

    def __init__(
        self,
        world: World,
        *,
        unit: str,
        rate_hz: float,
        integration_s: float,
        dark: float,
        noise: float,
        lag_s: float,
        range_: tuple[float, float] | None,
        memory: int = 2_000_000,
    ) -> None:
        self._world = world
        self._unit = unit
        self._interval_s = 1.0 / rate_hz
        self._integration_s = min(integration_s, self._interval_s)
        self._dark = dark
        self._noise = world.value("detector.noise", noise)
        self._lag_s = world.value("detector.lag", lag_s)
        self._range = range_
        self._memory = memory
        steps = 2.0 ** int(world.value("detector.adc_bits")) - 1.0
        self._step = (range_[1] - range_[0]) / steps if range_ else 0.0
        self._hum = world.value("detector.hum.amplitude")
        self._hum_hz = world.value("detector.hum.frequency")
        self._hum_rad = world.draw("detector.hum.phase", 0.0, 2.0 * math.pi)
        # A mean over the integration takes its share of the hum.
        self._hum *= float(np.sinc(self._hum_hz * self._integration_s))
        self._random = world.stream("detector.noise")
        self._stream_from_s: float | None = None
        self._taken = 0
        self._open = True

    @property
    def unit(self) -> str:
        return self._unit

    def identity(self, *, timeout_s: float) -> Identity:
        self._ask(timeout_s)
        return Identity("Evenarm", "simulated photodiode", "SIM-DETECTOR", simulated=True)

    def close(self) -> None:
        self._stream_from_s = None
        self._open = False

    @property
    def world(self) -> World:
        """The hidden truth: for tests, and for whoever is told to reveal it."""
        return self._world

    def operator_selects(self, source: str) -> None:
        """Put ``source`` into the interferometer: what a person does by hand at a real bench.

        Takes no bench time. Raises DeviceRefused where the bench has no such source.
        """
        self._world.hand_change(source)

    def read(self, count: int, *, timeout_s: float) -> Block:
        if count < 1:
            raise DeviceRefused(f"{count} readings cannot be taken", device="detector")
        self._ask(timeout_s)
        start_s = self._world.time_s()
        self._wait(count * self._interval_s, timeout_s)
        return self._block(start_s, 0, count)

    def start_stream(self, *, timeout_s: float) -> None:
        self._ask(timeout_s)
        if self._stream_from_s is not None:
            raise DeviceRefused("a stream goes on already", device="detector")
        self._stream_from_s = self._world.time_s()
        self._taken = 0

    def take(self, duration_s: float, *, timeout_s: float) -> Block:
        self._ask(timeout_s)
        if self._stream_from_s is None:
            raise DeviceRefused("no stream goes on", device="detector", mend="start one")
        self._wait(max(0.0, duration_s), timeout_s)
        elapsed_s = self._world.time_s() - self._stream_from_s
        # A reading is there once its integration is over; the epsilon is for rounding of times.
        ready = math.floor((elapsed_s - self._integration_s) / self._interval_s + 1e-6) + 1
        first, self._taken = self._taken, max(self._taken, ready)
        if self._taken - first > self._memory:
            raise ReadingInvalid(
                f"{self._taken - first - self._memory} readings were lost",
                device="detector",
                mend="take blocks more often",
            )
        return self._block(self._stream_from_s, first, self._taken)

    def stop_stream(self, *, timeout_s: float) -> None:
        self._ask(timeout_s)
        self._stream_from_s = None

    # --- inside --------------------------------------------------------------------------------

    def _ask(self, timeout_s: float) -> None:
        if not self._open:
            raise NotConnected("the detector was closed", device="detector", mend="open it again")
        self._world.reach("detector", timeout_s=timeout_s)

    def _wait(self, duration_s: float, timeout_s: float) -> None:
        """Let the readings happen; a silent detector keeps the caller until the deadline."""
        self._world.reach("detector", timeout_s=timeout_s, takes_s=duration_s)
        self._world.reach("detector", timeout_s=timeout_s)
        if self._world.faults.active("detector silent", self._world.time_s()):
            self._world.clock.sleep_s(timeout_s - duration_s)
            raise NoReply(
                f"the detector said nothing for {timeout_s:g} s",
                device="detector",
                mend="look at its power and its cable",
            )

    def _block(self, start_s: float, first: int, last: int) -> Block:
        number = np.arange(first, last, dtype=np.float64)
        time_s: FloatArray = start_s + number * self._interval_s + 0.5 * self._integration_s
        # Drawn for silent readings too: a fault changes no noise but its own.
        noise = self._noise * self._random.standard_normal(time_s.size)
        signal = self._dark + noise
        if time_s.size:
            signal += self._world.light(time_s - self._lag_s, self._integration_s)
        if self._hum:
            angle = 2.0 * math.pi * self._hum_hz * time_s + self._hum_rad
            signal += self._hum * np.sin(angle)
        faults = self._world.faults
        if self._range is None:
            saturated = np.zeros(time_s.size, dtype=np.bool_)
        else:
            low, high = self._range
            signal[faults.during("detector saturated", time_s)] = math.inf
            signal = low + self._step * np.rint((np.clip(signal, low, high) - low) / self._step)
            saturated = (signal <= low) | (signal >= high - 0.5 * self._step)
        heard = ~faults.during("detector silent", time_s)
        return Block(self._world.clock_s(time_s[heard]), signal[heard], saturated[heard])
