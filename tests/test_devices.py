"""Opening the devices of a bench: whatever a driver does, the ports are let go and it is named."""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from bench.errors import BenchFault, UsageError
from bench.procedure import devices
from bench.procedure.devices import open_devices
from bench.spec import find_bench, load_bench
from bench.spec.model import BenchSpec
from drivers import registry
from drivers.clock import RealClock, VirtualClock
from drivers.contracts import Context, DeviceRefused, Driver, NotConnected
from drivers.registry import Available, LoadFailure

Open = Callable[[Any, Context], Any]


@pytest.fixture(scope="module")
def shipped() -> BenchSpec:
    found = find_bench(None, Path("/nowhere"))
    return load_bench(found.path, declared=registry.declared, known_drivers=registry.names)


@pytest.fixture
def spec(shipped: BenchSpec) -> BenchSpec:
    """Stage and changer are simulated, the detector is a plug-in's."""
    return replace(
        shipped,
        detector=replace(shipped.detector, driver="odd"),
        changer={"driver": "simulated", "settings": {}},
    )


@pytest.fixture(autouse=True)
def no_thread_is_left() -> Iterator[None]:
    before = set(threading.enumerate())
    yield
    left = {t.name for t in threading.enumerate() if t not in before and t.is_alive()}
    assert not left


class Closing:
    """Writes down when it is closed; forwards the rest to the device that it wraps."""

    def __init__(self, inner: Any, log: list[str], kind: str) -> None:
        self._inner, self._log, self._kind = inner, log, kind

    def __getattr__(self, name: str) -> Any:
        return getattr(self._inner, name)

    def close(self) -> None:
        self._log.append(self._kind)
        self._inner.close()


@pytest.fixture
def plug(monkeypatch: pytest.MonkeyPatch) -> Callable[[Open], list[str]]:
    """Put ``open`` in place of the detector's; the list says which devices were closed, in turn."""

    def put(opens: Open, *, simulated: bool = False) -> list[str]:
        closed: list[str] = []

        def watched(driver: Driver) -> Open:
            return lambda settings, context: Closing(
                driver.open(settings, context), closed, driver.kind
            )

        def declared(kind: str, name: str) -> Driver:
            if name == "odd":
                return Driver("odd", "detector", "a test", opens, simulated=simulated)
            driver = registry.load(kind, name)
            return replace(driver, open=watched(driver))

        monkeypatch.setattr(devices, "declared", declared)
        return closed

    return put


def raises(error: BaseException) -> Open:
    def opens(settings: Any, context: Context) -> Any:
        raise error

    return opens


@pytest.mark.parametrize(
    ("error", "why", "mend"),
    [
        (PermissionError(13, "Permission denied", "/dev/ttyX0"),
         "/dev/ttyX0: Permission denied", "let this user use the port"),
        (FileNotFoundError(2, "No such file", "/dev/ttyX0"), "/dev/ttyX0: No such file", "plug it"),
        (OSError(16, "Device or resource busy"), "Device or resource busy", "no other program"),
        (TimeoutError(), "TimeoutError", "cable and power"),
        (ValueError("baud"), "ValueError: baud", "[detector.settings]"),
        (TypeError("no number"), "TypeError: no number", "[detector.settings]"),
        (KeyError("port"), "KeyError: 'port'", "[detector.settings]"),
        (ModuleNotFoundError("No module named 'x'"), "No module named 'x'", "who wrote the driver"),
        (SystemExit(3), "SystemExit: 3", "who wrote the driver"),
    ],
    ids=lambda value: type(value).__name__ if isinstance(value, BaseException) else None,
)  # fmt: skip
def test_what_a_driver_raises_is_a_fault_of_the_bench(
    spec: BenchSpec, plug: Callable[[Open], list[str]], error: BaseException, why: str, mend: str
) -> None:
    closed = plug(raises(error))
    with pytest.raises(BenchFault) as caught:
        open_devices(spec)
    fault = caught.value
    assert fault.exit_status == 3
    assert fault.what == "the detector cannot be opened"
    assert fault.where == "[detector] driver 'odd'"
    assert why in fault.why
    assert mend in fault.mend
    assert fault.__cause__ is error
    assert closed == ["stage"]


@pytest.mark.parametrize(
    ("error", "where", "mend"),
    [
        (DeviceRefused("it is busy", device="meter 7", mend="wait"), ": meter 7", "wait"),
        (NotConnected("nothing is there"), "", "check its cable and power"),
    ],
)
def test_what_a_device_says_is_kept_and_its_driver_is_named(
    spec: BenchSpec, plug: Callable[[Open], list[str]], error: Any, where: str, mend: str
) -> None:
    closed = plug(raises(error))
    with pytest.raises(BenchFault) as caught:
        open_devices(spec)
    assert caught.value.what == error.what
    assert caught.value.where == "[detector] driver 'odd'" + where
    assert mend in caught.value.mend
    assert closed == ["stage"]


def test_an_interrupt_closes_what_is_open_and_goes_on(
    spec: BenchSpec, plug: Callable[[Open], list[str]]
) -> None:
    closed = plug(raises(KeyboardInterrupt()))
    with pytest.raises(KeyboardInterrupt):
        open_devices(spec)
    assert closed == ["stage"]


def test_the_last_opened_is_closed_first(
    spec: BenchSpec, plug: Callable[[Open], list[str]], monkeypatch: pytest.MonkeyPatch
) -> None:
    detector = registry.load("detector", "simulated")
    closed = plug(
        lambda settings, context: Closing(detector.open(settings, context), closed, "detector")
    )
    refused = replace(registry.load("changer", "simulated"), open=raises(OSError("gone")))
    known = devices.declared
    monkeypatch.setattr(
        devices, "declared", lambda kind, name: refused if kind == "changer" else known(kind, name)
    )
    with pytest.raises(BenchFault, match="changer"):
        open_devices(spec)
    assert closed == ["detector", "stage"]


def test_something_that_is_no_detector_is_refused_and_closed(
    spec: BenchSpec, plug: Callable[[Open], list[str]]
) -> None:
    stage = registry.load("stage", "simulated")
    closed = plug(lambda settings, context: Closing(stage.open(settings, context), closed, "odd"))
    with pytest.raises(BenchFault) as caught:
        open_devices(spec)
    assert "no detector: it has no read, start_stream, stop_stream, take" in caught.value.why
    assert closed == ["odd", "stage"]


@pytest.mark.parametrize("opened", [None, 5, object()])
def test_nothing_at_all_is_refused(
    spec: BenchSpec, plug: Callable[[Open], list[str]], opened: object
) -> None:
    closed = plug(lambda settings, context: opened)
    with pytest.raises(BenchFault, match="cannot be opened"):
        open_devices(spec)
    assert closed == ["stage"]


def test_a_device_whose_thread_cannot_start_is_closed(
    spec: BenchSpec, plug: Callable[[Open], list[str]], monkeypatch: pytest.MonkeyPatch
) -> None:
    closed = plug(raises(AssertionError("never reached")))

    def no_thread(name: str, device: Any) -> Any:
        raise RuntimeError("can't start new thread")

    monkeypatch.setattr(devices, "Port", no_thread)
    with pytest.raises(RuntimeError, match="new thread"):
        open_devices(spec)
    assert closed == ["stage"]


def test_a_driver_that_forwards_to_what_it_wraps_is_opened_and_closed(
    spec: BenchSpec, plug: Callable[[Open], list[str]]
) -> None:
    detector = registry.load("detector", "simulated")
    closed = plug(
        lambda settings, context: Closing(detector.open(settings, context), closed, "detector")
    )
    opened = open_devices(spec)
    try:
        assert set(opened.identities()) == {"stage", "detector", "changer"}
        assert not opened.simulated
        assert isinstance(opened.clock, RealClock)
        # It says of itself that it is real: nothing of the simulated bench is believed of it.
        assert opened.select_by_simulated_hand is None
        assert opened.residual_opd_m is None
    finally:
        opened.close()
    assert sorted(closed) == ["changer", "detector", "stage"]


def test_a_simulated_bench_has_a_clock_and_a_truth_of_its_own(shipped: BenchSpec) -> None:
    opened = open_devices(shipped)
    try:
        assert opened.simulated
        assert isinstance(opened.clock, VirtualClock)
        assert opened.select_by_simulated_hand is not None
        assert opened.residual_opd_m is not None
    finally:
        opened.close()


def test_a_broken_plug_in_is_named(spec: BenchSpec, monkeypatch: pytest.MonkeyPatch) -> None:
    broken = Available("detector", "odd", "odd_package:DETECTOR", "odd-package")

    def declared(kind: str, name: str) -> Driver | None:
        if name == "odd":
            raise LoadFailure(broken, "ModuleNotFoundError: No module named 'odd'")
        return registry.declared(kind, name)

    monkeypatch.setattr(devices, "declared", declared)
    with pytest.raises(UsageError) as caught:
        open_devices(spec)
    assert caught.value.what == "the detector driver 'odd' cannot be used"
    assert caught.value.where == "odd_package:DETECTOR, from odd-package"
    assert "No module named 'odd'" in caught.value.why
    assert "evenarm drivers --load" in caught.value.mend


def test_an_unknown_driver_is_named(spec: BenchSpec) -> None:
    with pytest.raises(UsageError, match="there is no detector driver called 'odd'"):
        open_devices(spec)
