"""The hidden truth behind a simulated bench, and the light that follows from it.

One world serves all devices of one opening of one bench. It keeps the commanded path of the stage
and the source in use; everything else is worked out for the times that a device asks about. Random
quantities come from streams named after their key, so a key more or less, or another order of
calls, changes no other number.
"""

from __future__ import annotations

import math
import threading
import zlib
from collections.abc import Mapping
from functools import cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from drivers.contracts import Clock, Context, DeviceRefused, NoReply, NotConnected
from drivers.simulated.faults import Faults
from drivers.simulated.glass import GLASSES, Glass
from drivers.simulated.light import Packet, lamp, packet
from drivers.simulated.motion import Mechanics, Path
from drivers.simulated.settings import WORLD_SETTINGS
from drivers.simulated.truth import Truth

__all__ = ["Truth", "World"]

FloatArray = NDArray[np.float64]

_DEFAULTS = {setting.name: setting.default for setting in WORLD_SETTINGS}
_SHARED_KEY = "simulated.world"


class World:
    """One simulated bench. ``bench`` is ``Context.bench``; raises ValueError where it is unusable.

    Thread-safe: the devices of one bench may be asked from different threads.
    """

    def __init__(self, bench: Mapping[str, Any], clock: Clock) -> None:
        self.clock = clock
        self._bench = bench
        self._given: Mapping[str, Any] = bench.get("world") or {}
        self._seed = int(bench.get("seed") or 0)
        self._origin_s = clock.now_s()
        self._lock = threading.RLock()
        stage = bench["stage"]
        material = self._given.get("truth.glass.material")
        zero_m = self.value("truth.zero")
        self.truth = Truth(
            zero_m=zero_m,
            contrast=self.value("truth.contrast"),
            phase_rad=self.value("truth.phase"),
            glass_material=material,
            glass_thickness_m=self.value("truth.glass.thickness"),
            path_factor=float(bench["path_factor"]),
            air_index=float(bench["air_index"]),
            drift_m_s=self.value("drift.path"),
            mechanics=Mechanics(
                zero_m=zero_m,
                reversal_m=self.value("stage.reversal_error"),
                periodic_m=self.value("stage.periodic_error.amplitude"),
                period_m=self.value("stage.periodic_error.period"),
                periodic_phase_rad=self.draw("stage.periodic_error.phase", 0.0, 2.0 * math.pi),
                scale=self.value("stage.scale_error"),
                ringing_m=self.value("stage.ringing"),
                settle_s=float(stage.get("settle_s") or 0.0),
            ),
        )
        low_m, high_m = stage.get("travel_m") or (zero_m - 0.01, zero_m + 0.01)
        self.origin_m = low_m
        margin_m = 0.02 * (high_m - low_m)
        self.ends_m = (
            self.value("stage.low_end", low_m - margin_m),
            self.value("stage.high_end", high_m + margin_m),
        )
        start_m = self.value("stage.start", low_m + 0.3 * (high_m - low_m))
        self.path = Path(
            min(max(start_m, self.ends_m[0]), self.ends_m[1]), 0.0, self.truth.mechanics
        )
        self.faults = Faults.declared(self._tables("fault"))
        self._position_noise_m = self.value("stage.position_noise")
        self._jitter = self.stream("stage.position_noise")
        self._vibration = (
            self.value("vibration.amplitude"),
            self.value("vibration.frequency"),
            self.draw("vibration.phase", 0.0, 2.0 * math.pi),
        )
        self._sources = {str(source["name"]): source for source in bench["sources"]}
        if not self._sources:
            raise ValueError("a simulated bench needs a source")
        self._lamps = {name: lamp(item["spectrum"]) for name, item in self._sources.items()}
        self._levels = {
            str(table["name"]): table["level"]
            for table in self._tables("source")
            if table.get("level") is not None
        }
        self._packets: dict[str, Packet] = {}
        self._source: str = next(iter(self._sources))

    @classmethod
    def of(cls, context: Context) -> World:
        """The world of this opening of the bench: made by the first device that asks."""
        world = context.shared.get(_SHARED_KEY)
        if world is None:
            world = context.shared[_SHARED_KEY] = cls(context.bench, context.clock)
        if not isinstance(world, cls):
            raise ValueError(f"{_SHARED_KEY} of the shared context is not a world")
        return world

    # --- random quantities ------------------------------------------------------------

    def stream(self, name: str) -> np.random.Generator:
        """A random stream of its own for ``name``; the same for the same seed."""
        key = zlib.crc32(name.encode())
        return np.random.Generator(np.random.PCG64(np.random.SeedSequence([self._seed, key])))

    def draw(self, name: str, low: float, high: float) -> float:
        return float(self.stream(name).uniform(low, high))

    def value(self, name: str, absent: float | None = None) -> float:
        """The world's number ``name``, drawn where a range is given, else ``absent`` or default."""
        given = self._given.get(name)
        if given is None:
            fallback = absent if absent is not None else _DEFAULTS[name]
            if fallback is None:
                raise ValueError(f"the world says nothing of {name}")
            return float(fallback)
        return self._settled(name, given)

    def _settled(self, name: str, given: Any) -> float:
        if isinstance(given, tuple | list):
            return self.draw(name, float(given[0]), float(given[1]))
        return float(given)

    def _tables(self, name: str) -> list[dict[str, Any]]:
        """The tables of an array of the world file with their random numbers drawn."""
        return [
            {
                key: self._settled(f"{name}[{place}].{key}", item)
                if isinstance(item, tuple | list)
                else item
                for key, item in table.items()
            }
            for place, table in enumerate(self._given.get(name) or ())
        ]

    # --- time and faults ------------------------------------------------------------

    def time_s(self) -> float:
        """Seconds of bench time since the world began."""
        return self.clock.now_s() - self._origin_s

    def clock_s(self, time_s: FloatArray) -> FloatArray:
        """Times since the world began as times of the bench's clock."""
        return time_s + self._origin_s

    def motor_s(self) -> float:
        """Now, as the motor of the stage knows it."""
        return float(self.faults.motion_time_s(np.asarray(self.time_s())))

    def reach(self, device: str, *, timeout_s: float, takes_s: float = 0.0) -> None:
        """A question to ``device`` that takes ``takes_s``.

        Raises NotConnected while it is unplugged and NoReply where the deadline is shorter.
        """
        if self.faults.active("unplugged", self.time_s(), device):
            raise NotConnected(
                f"the {device} is not there", device=device, mend="look at the cable and the power"
            )
        if takes_s > timeout_s:
            self.clock.sleep_s(timeout_s)
            raise NoReply(
                f"the {device} had {timeout_s:g} s and needs {takes_s:g} s",
                device=device,
                mend="allow more time",
            )
        self.clock.sleep_s(takes_s)

    # --- the stage ------------------------------------------------------------

    def locked(self) -> threading.RLock:
        """Held while the path of the stage is changed or read off."""
        return self._lock

    def mirror_m(self, time_s: FloatArray) -> FloatArray:
        """True positions at times since the world began, without position noise."""
        with self._lock:
            return self.path.mirror_m(self.faults.motion_time_s(time_s))

    def residual_opd_m(self, wavelength_m: float) -> float:
        """Group OPD now, wherever the mirror is and however it came there."""
        now_s = self.time_s()
        mirror_m = float(self.mirror_m(np.asarray([now_s]))[0])
        return self.truth.mirror_opd_m(mirror_m, wavelength_m, now_s)

    # --- the source ------------------------------------------------------------

    @property
    def sources(self) -> tuple[str, ...]:
        return tuple(self._sources)

    @property
    def source(self) -> str:
        """The source in use; at first the first of the bench."""
        return self._source

    def hand_change(self, source: str) -> None:
        """Put ``source`` into the interferometer, as a person at the bench does.

        Takes no bench time: whoever asked the person waits. Raises DeviceRefused where the bench
        has no such source.
        """
        if source not in self._sources:
            raise DeviceRefused(
                f"this bench has no source {source!r}; it has {', '.join(self._sources)}",
                device="source",
            )
        self._source = source

    def level(self, source: str) -> float:
        """Mean level above dark, in the detector's unit."""
        given = self._levels.get(source)
        if given is not None:
            return float(given)
        signal = float(self._sources[source]["signal"])
        return signal / self.truth.contrast if self.truth.contrast > 0.0 else signal

    def packet(self, source: str) -> Packet:
        """Fringes of ``source`` against the OPD of the air paths; worked out once."""
        with self._lock:
            if source not in self._packets:
                glass: Glass | None = None
                if self.truth.glass_material is not None:
                    glass = GLASSES[self.truth.glass_material]
                self._packets[source] = packet(
                    self._lamps[source],
                    glass,
                    self.truth.glass_thickness_m,
                    self.truth.air_index,
                )
            return self._packets[source]

    # --- the light ------------------------------------------------------------

    def opd_m(self, time_s: FloatArray, jitter_m: FloatArray | float = 0.0) -> FloatArray:
        """OPD of the air paths, with drift and vibration; ``jitter_m`` in position."""
        truth = self.truth
        air = truth.air_index * truth.path_factor
        opd_m = air * (self.mirror_m(time_s) + jitter_m - truth.zero_m)
        if truth.drift_m_s:
            opd_m = opd_m + truth.drift_m_s * time_s
        amplitude_m, frequency_hz, phase_rad = self._vibration
        if amplitude_m:
            angle = 2.0 * math.pi * frequency_hz * time_s + phase_rad
            opd_m = opd_m + amplitude_m * np.sin(angle)
        for fault in self.faults.of("vibration burst"):
            struck = (time_s >= fault.start_s) & (time_s < fault.end_s)
            if struck.any():
                angle = 2.0 * math.pi * fault.frequency_hz * (time_s - fault.start_s)
                opd_m = opd_m + np.where(struck, fault.amplitude_m * np.sin(angle), 0.0)
        return opd_m

    def light(self, time_s: FloatArray, integration_s: float) -> FloatArray:
        """Light on the detector without its dark level, shape (n,), averaged over the integration.

        ``time_s`` (n,) are the middles of the integrations since the world began. The average is a
        Gauss-Legendre sum over the path within each, with as many points as the fastest needs.
        """
        count = time_s.size
        jitter_m: FloatArray | float = 0.0
        if self._position_noise_m:
            jitter_m = self._position_noise_m * self._jitter.standard_normal(count)
        source = self._source
        fringes = self.packet(source)
        nodes, weights = self._nodes(time_s, integration_s, fringes.carrier)
        average = np.zeros(count)
        for node, weight in zip(nodes, weights, strict=True):
            opd_m = self.opd_m(time_s + 0.5 * integration_s * node, jitter_m)
            average += 0.5 * weight * fringes.fringes(opd_m, self.truth.phase_rad)
        light = self.level(source) * (1.0 + self.truth.contrast * average)
        light[self.faults.during("lamp out", time_s)] = 0.0
        return light

    def _nodes(
        self, time_s: FloatArray, integration_s: float, carrier: float
    ) -> tuple[FloatArray, FloatArray]:
        """Gauss-Legendre nodes (-1 to 1) and weights that suit the fastest reading of a block."""
        from_s = float(time_s.min()) - 0.5 * integration_s
        to_s = float(time_s.max()) + 0.5 * integration_s
        motor_s = self.faults.motion_time_s(np.asarray([from_s, to_s]))
        with self._lock:
            fastest_m_s = self.path.fastest_m_s(float(motor_s[0]), float(motor_s[1]))
        path_m_s = abs(self.truth.air_index * self.truth.path_factor) * fastest_m_s
        path_m_s += abs(self.truth.drift_m_s)
        amplitude_m, frequency_hz, _ = self._vibration
        path_m_s += 2.0 * math.pi * frequency_hz * amplitude_m
        for fault in self.faults.of("vibration burst"):
            if fault.start_s < to_s and fault.end_s > from_s:
                path_m_s += 2.0 * math.pi * fault.frequency_hz * fault.amplitude_m
        # The spectrum's blue end turns faster than its mean.
        turn_rad = 1.5 * 2.0 * math.pi * carrier * path_m_s * integration_s
        if turn_rad < 0.01:
            return np.zeros(1), np.full(1, 2.0)
        return _legendre(min(64, 3 + math.ceil(0.6 * turn_rad)))


@cache
def _legendre(count: int) -> tuple[FloatArray, FloatArray]:
    nodes, weights = np.polynomial.legendre.leggauss(count)
    return np.asarray(nodes, dtype=np.float64), np.asarray(weights, dtype=np.float64)
