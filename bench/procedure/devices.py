"""The devices of a bench, opened: a port for each, one clock for all."""

from __future__ import annotations

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
from drivers.registry import load

from .ports import Port

__all__ = ["Devices", "as_fault", "declared", "open_devices", "parse_pace"]

OPEN_TIMEOUT_S = 10.0
DeviceT = TypeVar("DeviceT", bound=Device)


def as_fault(error: DeviceError) -> BenchFault:
    """A device's error as one that a person can act on."""
    return BenchFault(error.what, where=error.device or "a device", mend=error.mend)


def declared(kind: str, name: str) -> Driver | None:
    """The driver called ``name``, or None where there is none; what bench.spec asks for."""
    try:
        return load(cast(Kind, kind), name)
    except LookupError:
        return None


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
            ports[kind] = Port(kind, drivers[kind].open(settings, context))
    except DeviceError as error:
        for port in ports.values():
            port.close()
        raise as_fault(error) from None
    detector = ports["detector"].device
    return Devices(
        stage=ports["stage"],
        detector=ports["detector"],
        changer=ports.get("changer"),
        clock=clock,
        simulated=simulated,
        select_by_simulated_hand=getattr(detector, "operator_selects", None),
        residual_opd_m=detector.world.residual_opd_m if hasattr(detector, "world") else None,
    )


def _driver(kind: Kind, name: str) -> Driver:
    driver = declared(kind, name)
    if driver is None:
        raise UsageError(
            f"there is no {kind} driver called {printable(name)!r}",
            where=f"[{kind}] driver",
            mend="`evenarm drivers` lists what can be plugged in",
        )
    return driver
