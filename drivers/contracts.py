"""What a device must do for Evenarm, and how it says that it could not.

    DeviceError                      something between the program and the device went wrong
    ├── NotConnected                 the port is not there, or went away
    ├── NoReply                      nothing came back before the deadline
    ├── GarbledReply                 something came back that is not an answer to the question
    ├── DeviceRefused                the device understood and said no
    │   └── LimitReached             a hard or soft end of the device itself
    ├── NotHomed                     the device does not know where it is
    ├── MotionFailed                 a move ended somewhere else, or did not end
    └── ReadingInvalid               overload, not a number, out of range

Drivers are plain blocking objects. Every call ends before its deadline, one way or another, and is
made from one thread at a time. Lengths are metres, times are seconds of the bench's clock, signals
are in the detector's own unit as declared.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any, Literal, Protocol, runtime_checkable

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

# --- errors ------------------------------------------------------------------------------------


class DeviceError(Exception):
    """Something between the program and the device went wrong.

    ``device`` names it as the operator knows it; ``mend`` says what to try next.
    """

    def __init__(self, what: str, *, device: str = "", mend: str = "") -> None:
        super().__init__(what)
        self.what = what
        self.device = device
        self.mend = mend


class NotConnected(DeviceError):
    """The port is not there, or went away."""


class NoReply(DeviceError):
    """Nothing came back before the deadline."""


class GarbledReply(DeviceError):
    """Something came back that is not an answer to the question."""


class DeviceRefused(DeviceError):
    """The device understood and said no."""


class LimitReached(DeviceRefused):
    """A hard or soft end of the device itself."""


class NotHomed(DeviceError):
    """The device does not know where it is."""


class MotionFailed(DeviceError):
    """A move ended somewhere else, or did not end."""


class ReadingInvalid(DeviceError):
    """Overload, not a number, out of range."""


# --- time --------------------------------------------------------------------------------------


class Clock(Protocol):
    """Bench time. Real devices have a real clock; simulated ones share a clock that jumps."""

    def now_s(self) -> float:
        """Seconds since an arbitrary start; never runs backward."""
        ...

    def sleep_s(self, duration_s: float) -> None:
        """Let ``duration_s`` >= 0 pass."""
        ...


# --- what is said --------------------------------------------------------------------------------


@dataclass(frozen=True)
class Identity:
    """Who a device says it is. ``simulated`` devices can hurt nobody and cost nothing."""

    maker: str
    model: str
    serial: str
    firmware: str = ""
    simulated: bool = False


@dataclass(frozen=True)
class StageState:
    """Where a stage says it is, at ``time_s`` of the bench clock.

    ``known`` is false before homing and after a reset: ``position_m`` then means nothing.
    """

    position_m: float
    time_s: float
    moving: bool
    known: bool = True


@dataclass(frozen=True)
class Block:
    """Readings of a detector: ``time_s`` and ``signal`` of shape (n,), times at mid-integration.

    ``saturated`` marks readings at either end of the converter.
    """

    time_s: FloatArray
    signal: FloatArray
    saturated: BoolArray


@dataclass(frozen=True)
class Frame:
    """One picture of a camera: ``counts`` of shape (rows, columns), time at mid-exposure."""

    time_s: float
    counts: NDArray[np.uint16]
    full_scale: int


@dataclass(frozen=True)
class Climate:
    """Air at the bench: kelvin would invite mistakes, so degrees Celsius, pascal, 0 to 1."""

    time_s: float
    temperature_c: float
    pressure_pa: float
    relative_humidity: float


# --- what a device must do -----------------------------------------------------------------------


@runtime_checkable
class Device(Protocol):
    """What all devices share."""

    def identity(self, *, timeout_s: float) -> Identity:
        """Ask who it is. Raises DeviceError."""
        ...

    def close(self) -> None:
        """Let go of the port. Idempotent, raises nothing, leaves nothing moving."""
        ...


@runtime_checkable
class Stage(Device, Protocol):
    """One axis that moves a mirror. Positions are the stage's own readings in metres."""

    def state(self, *, timeout_s: float) -> StageState:
        """Live read-back. Raises DeviceError."""
        ...

    def start_home(self, *, timeout_s: float) -> None:
        """Begin to find the origin and return at once, so that a stop never has to wait for it.

        ``state`` tells when it is over: at rest there, and ``known``. Raises DeviceError.
        """
        ...

    def start_move(self, target_m: float, speed_m_s: float, *, timeout_s: float) -> None:
        """Begin to move and return at once; ``state`` tells when it has arrived.

        Raises NotHomed, LimitReached, DeviceRefused or another DeviceError.
        """
        ...

    def stop(self, *, timeout_s: float) -> None:
        """Come to rest as fast as the device does. Idempotent. Raises DeviceError."""
        ...


@runtime_checkable
class Detector(Device, Protocol):
    """A photodiode, a voltmeter: one number at a time, or a stream of blocks."""

    @property
    def unit(self) -> str:
        """Unit of the signal, such as ``V``."""
        ...

    def read(self, count: int, *, timeout_s: float) -> Block:
        """``count`` >= 1 fresh readings, the first begun after the call. Raises DeviceError."""
        ...

    def start_stream(self, *, timeout_s: float) -> None:
        """Begin to read at the rate declared in the settings. Raises DeviceError."""
        ...

    def take(self, duration_s: float, *, timeout_s: float) -> Block:
        """Wait ``duration_s`` and return all readings since the last call, none lost.

        Raises DeviceError; an overrun of the device's own memory is a ReadingInvalid.
        """
        ...

    def stop_stream(self, *, timeout_s: float) -> None:
        """End the stream. Idempotent. Raises DeviceError."""
        ...


@runtime_checkable
class Camera(Device, Protocol):
    """A camera that sees the overlapped beams."""

    def frame(self, *, timeout_s: float) -> Frame:
        """One fresh picture. Raises DeviceError."""
        ...


@runtime_checkable
class SourceChanger(Device, Protocol):
    """Puts one of the named sources into the interferometer."""

    def current(self, *, timeout_s: float) -> str | None:
        """The source now in use, None where the device cannot tell. Raises DeviceError."""
        ...

    def select(self, source: str, *, timeout_s: float) -> None:
        """Change to ``source`` and wait until it is there. Raises DeviceRefused, DeviceError."""
        ...


@runtime_checkable
class ClimateSensor(Device, Protocol):
    """Temperature, pressure and humidity at the bench."""

    def read_climate(self, *, timeout_s: float) -> Climate:
        """Air now. Raises DeviceError."""
        ...


# --- what a driver declares ----------------------------------------------------------------------

Kind = Literal["stage", "detector", "camera", "changer", "climate"]
KINDS: tuple[Kind, ...] = ("stage", "detector", "camera", "changer", "climate")


@dataclass(frozen=True)
class Setting:
    """One key that a driver understands in its ``settings`` table.

    ``unit`` is an SI unit as text for a quantity (the value then arrives converted to it, as a
    float), ``""`` for a bare number, or one of ``"text"``, ``"bool"``, ``"int"``. ``low`` and
    ``high`` are inclusive and in that unit. ``choices`` narrows a text. ``"signal"`` as unit is the
    detector's own.

    The same declares the keys of a simulated driver's world file: there a dotted name such as
    ``stage.periodic_error.amplitude`` is a nested table and ``source[].level`` a key of each table
    of an array. With ``random`` the file may give ``{ uniform = ["a", "b"] }`` in place of a
    quantity; the value then arrives as the pair of floats and the driver draws from it.
    """

    name: str
    unit: str
    doc: str
    default: float | int | str | bool | None = None
    required: bool = False
    low: float | None = None
    high: float | None = None
    choices: tuple[str, ...] = ()
    random: bool = False


@dataclass(frozen=True)
class Context:
    """What a driver is given when it is opened, besides its settings.

    ``bench`` is the bench's description in plain SI numbers and texts, as
    ``bench.spec.for_drivers`` writes it; ``folder`` is where relative file names begin.
    ``shared`` is one dictionary for all devices of one opening of one bench: simulated devices find
    their common world there.
    """

    clock: Clock
    folder: str
    bench: Mapping[str, Any]
    shared: dict[str, Any] = field(default_factory=dict)


@dataclass(frozen=True)
class Driver:
    """An entry point's object: how to check and to open one family of devices.

    ``faults`` explains, in a line each, the kinds that ``world`` allows for ``fault[].kind``.
    """

    name: str
    kind: Kind
    summary: str
    open: Callable[[Mapping[str, Any], Context], Device]
    settings: tuple[Setting, ...] = ()
    simulated: bool = False
    capabilities: frozenset[str] = frozenset()
    world: tuple[Setting, ...] = ()
    faults: Mapping[str, str] = field(default_factory=dict, hash=False)
