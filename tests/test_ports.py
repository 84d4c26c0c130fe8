"""One owner thread for each device, and a stop that does not queue."""

from __future__ import annotations

import threading

import pytest

from bench.procedure.ports import Port
from drivers.contracts import NoReply, NotConnected


class Slow:
    """A device whose calls end when told."""

    def __init__(self) -> None:
        self.order: list[str] = []
        self.busy = threading.Event()
        self.go_on = threading.Event()
        self.closed = 0
        self.threads: set[int] = set()

    def identity(self, *, timeout_s):
        return None

    def work(self, name: str, wait: bool = False) -> str:
        self.threads.add(threading.get_ident())
        if wait:
            self.busy.set()
            assert self.go_on.wait(10)
        self.order.append(name)
        return name

    def close(self) -> None:
        self.closed += 1


@pytest.fixture
def port():
    made = Port("slow", Slow())
    yield made
    made.device.go_on.set()
    made.close()


def test_an_urgent_call_goes_ahead_of_everything_queued(port):
    def ask(name: str, wait: bool = False, urgent: bool = False) -> threading.Thread:
        how = port.urgent if urgent else port.call
        thread = threading.Thread(target=lambda: how(lambda d: d.work(name, wait), timeout_s=10.0))
        thread.start()
        return thread

    threads = [ask("reading", wait=True)]
    assert port.device.busy.wait(10)
    threads += [ask("second reading"), ask("third reading")]
    while len(port._jobs) < 2:
        pass
    threads.append(ask("stop", urgent=True))
    while len(port._jobs) < 3:
        pass
    port.device.go_on.set()
    for thread in threads:
        thread.join(10)
    assert port.device.order[:2] == ["reading", "stop"]
    assert set(port.device.order[2:]) == {"second reading", "third reading"}
    assert len(port.device.threads) == 1
    assert threading.get_ident() not in port.device.threads


def test_an_error_of_the_device_comes_to_the_caller(port):
    def fail(_device):
        raise NoReply("silence")

    with pytest.raises(NoReply, match="silence") as caught:
        port.call(fail, timeout_s=1.0)
    assert caught.value.device == "slow"
    assert port.call(lambda d: d.work("after"), timeout_s=1.0) == "after"


def test_a_driver_that_breaks_its_deadline_is_no_reply(port):
    port.grace_s = 0.01
    with pytest.raises(NoReply, match="did not answer within"):
        port.call(lambda d: d.work("late", True), timeout_s=0.01)
    port.device.go_on.set()
    port.grace_s = 5.0
    assert port.call(lambda d: d.work("next"), timeout_s=5.0) == "next"


def test_closing_twice_closes_once_and_refuses_calls():
    port = Port("slow", Slow())
    port.close()
    port.close()
    assert port.device.closed == 1
    assert not port._thread.is_alive()
    with pytest.raises(NotConnected):
        port.call(lambda d: d.work("x"), timeout_s=1.0)
