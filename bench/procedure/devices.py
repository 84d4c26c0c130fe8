"""The devices of a bench, opened: a port for each, one clock for all."""

from __future__ import annotations

import contextlib
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, TypeVar, cast

from bench.errors import BenchFault, UsageError, printable
from bench.spec import for_drivers
from bench.spec.model import BenchSpec
from drivers.clock import RealClock, VirtualClock
from drivers.contracts import (
    Clock,
    Context,
    Detector,
    Device,
    DeviceError,
    Driver,
    Identity,
    Kind,
    SourceChanger,
    Stage,
)
from drivers.registry import LoadFailure, declared

from .ports import Port

__all__ = ["Devices", "as_fault", "open_devices", "parse_pace"]

OPEN_TIMEOUT_S = 10.0
_MEND_PORT = "check its cable and power, and that no other program uses its port"
_PROTOCOLS: dict[Kind, type] = {
    "stage": Stage,
    "detector": Detector,
    "changer": SourceChanger,
}
DeviceT = TypeVar("DeviceT", bound=Device)


def as_fault(error: DeviceError) -> BenchFault:
    """A device's error as one that a person can act on."""
    return BenchFault(error.what, where=error.device or "a device", mend=error.mend)


def parse_pace(text: str) -> float | None:
    """ "real" is 1, "fast" is None (time jumps), a number is so many times real."""
    if text == "real":
        return 1.0
    if text == "fast":
        return None
    try:
        pace = float(text)
    except ValueError:
        pace = 0.0
    if not 0.1 <= pace <= 1e6:
        raise UsageError(
            "the pace cannot be used",
            where="--pace",
            why=f"{text!r} is neither real, fast nor a number from 0.1 to 1000000",
            mend="give --pace real, --pace fast, or how many times faster, such as --pace 10",
        )
    return pace


@dataclass(frozen=True)
class Devices:
    """Everything that a run talks to. ``simulated`` only if every device is.

    ``residual_opd_m`` is what a simulated bench hides: the OPD now, for a wavelength in metres.
    """

    stage: Port[Stage]
    detector: Port[Detector]
    changer: Port[SourceChanger] | None
    clock: Clock
    simulated: bool
    select_by_simulated_hand: Callable[[str], None] | None
    residual_opd_m: Callable[[float], float] | None

    def identities(self) -> dict[str, Identity]:
        """Ask every device who it is. Raises BenchFault."""
        ports: dict[str, Port[Any]] = {"stage": self.stage, "detector": self.detector}
        if self.changer is not None:
            ports["changer"] = self.changer
        try:
            return {
                role: port.call(
                    lambda device: device.identity(timeout_s=OPEN_TIMEOUT_S),
                    timeout_s=OPEN_TIMEOUT_S,
                )
                for role, port in ports.items()
            }
        except DeviceError as error:
            raise as_fault(error) from None

    def close(self) -> None:
        """Let go of every port. Idempotent."""
        for port in (self.detector, self.changer, self.stage):
            if port is not None:
                port.close()


def open_devices(spec: BenchSpec, *, pace: float | None = None) -> Devices:
    """Open every device of the bench. Raises BenchFault, UsageError.

    Simulated devices share one clock of their own, which runs ``pace`` times real time or jumps;
    as soon as one device is real, the clock is the wall's.
    """
    wanted: dict[Kind, tuple[str, Mapping[str, Any]]] = {
        "stage": (spec.stage.driver, spec.stage.settings),
        "detector": (spec.detector.driver, spec.detector.settings),
    }
    if spec.changer is not None:
        wanted["changer"] = (str(spec.changer["driver"]), spec.changer.get("settings", {}))
    drivers = {kind: _driver(kind, name) for kind, (name, _) in wanted.items()}
    simulated = all(driver.simulated for driver in drivers.values())
    clock: Clock = VirtualClock(pace) if simulated else RealClock()
    context = Context(clock=clock, folder=str(spec.folder), bench=for_drivers(spec))
    ports: dict[Kind, Port[Any]] = {}
    try:
        for kind, (_, settings) in wanted.items():
            ports[kind] = _opened(drivers[kind], settings, context)
        # Only a simulated bench has a hand and a truth of its own, whatever else a driver calls so.
        hidden = ports["detector"].device if drivers["detector"].simulated else None
        return Devices(
            stage=ports["stage"],
            detector=ports["detector"],
            changer=ports.get("changer"),
            clock=clock,
            simulated=simulated,
            select_by_simulated_hand=getattr(hidden, "operator_selects", None),
            residual_opd_m=getattr(getattr(hidden, "world", None), "residual_opd_m", None),
        )
    except BaseException:  # an interrupt too must leave no port open
        for port in reversed(ports.values()):
            port.close()
        raise


def _driver(kind: Kind, name: str) -> Driver:
    try:
        driver = declared(kind, name)
    except LoadFailure as failure:
        plugin = failure.plugin
        raise UsageError(
            f"the {kind} driver {printable(name)!r} cannot be used",
            where=f"{plugin.target}, from {plugin.source}",
            why=failure.why,
            mend="repair or uninstall it; `evenarm drivers --load` tries every one",
        ) from failure
    if driver is None:
        raise UsageError(
            f"there is no {kind} driver called {printable(name)!r}",
            where=f"[{kind}] driver",
            mend="`evenarm drivers` lists what can be plugged in",
        )
    return driver


def _opened(driver: Driver, settings: Mapping[str, Any], context: Context) -> Port[Any]:
    """The device behind its port. Raises BenchFault, whatever the driver itself raises."""
    what = f"the {driver.kind} cannot be opened"
    where = f"[{driver.kind}] driver {driver.name!r}"
    try:
        device: object = driver.open(settings, context)
        missing = [name for name in _members(driver.kind) if not hasattr(device, name)]
    except DeviceError as error:
        where = f"{where}: {error.device}" if error.device else where
        raise BenchFault(error.what, where=where, mend=error.mend or _MEND_PORT) from error
    except OSError as error:
        parts = (str(error.filename or ""), error.strerror or str(error) or type(error).__name__)
        raise BenchFault(
            what,
            where=where,
            why=": ".join(part for part in parts if part),
            mend=_mend_of(error, driver.kind),
        ) from error
    except (Exception, SystemExit) as error:  # a plug-in may raise anything
        raise BenchFault(
            what,
            where=where,
            why=f"the driver itself failed: {type(error).__name__}: {error}",
            mend=f"check [{driver.kind}.settings]; if they are right, tell who wrote the driver",
        ) from error
    try:
        if missing:
            raise BenchFault(
                what,
                where=where,
                why=f"the driver opened a {type(device).__name__}, which is no {driver.kind}: "
                f"it has no {', '.join(missing)}",
                mend="tell who wrote the driver",
            )
        return Port(driver.kind, cast(Device, device))
    except BaseException:
        with contextlib.suppress(Exception):
            cast(Device, device).close()
        raise


def _members(kind: Kind) -> list[str]:
    """What a device must have. Looked up by name, because drivers may forward to what they wrap."""
    return [name for name in dir(_PROTOCOLS[kind]) if not name.startswith("_")]


def _mend_of(error: OSError, kind: Kind) -> str:
    if isinstance(error, PermissionError):
        return "let this user use the port: on Linux, join the group that owns it and log in again"
    if isinstance(error, FileNotFoundError):
        return f"plug it in and switch it on, or correct its port in [{kind}.settings]"
    return _MEND_PORT
