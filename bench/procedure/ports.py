"""One owner thread for each device: calls queue, and a stop goes ahead of the queue.

Drivers are plain blocking objects that expect one caller at a time. A port gives each of them a
thread of its own, so that a detector that takes its time never holds up the stage.
"""

from __future__ import annotations

import heapq
import itertools
import threading
from collections.abc import Callable
from concurrent.futures import Future
from concurrent.futures import TimeoutError as FutureTimeout
from dataclasses import dataclass, field
from typing import Any, Generic, TypeVar

from bench.errors import EvenarmError
from drivers.contracts import Device, DeviceError, NoReply, NotConnected

DeviceT = TypeVar("DeviceT", bound=Device)
ResultT = TypeVar("ResultT")

_URGENT, _ORDINARY, _LAST = 0, 1, 2


@dataclass(order=True)
class _Job:
    priority: int
    number: int
    work: Callable[[], Any] | None = field(compare=False)
    future: Future[Any] = field(compare=False)


class Port(Generic[DeviceT]):
    """A device behind its owner thread.

    ``call`` and ``urgent`` block until the device has answered or ``grace_s`` beyond the deadline
    that the call itself was given; a driver that breaks its own deadline is a NoReply.
    """

    grace_s = 5.0

    def __init__(self, name: str, device: DeviceT) -> None:
        self.name = name
        self.device = device
        self._jobs: list[_Job] = []
        self._numbers = itertools.count()
        self._wake = threading.Condition()
        self._closed = False
        self._thread = threading.Thread(target=self._serve, name=f"port-{name}", daemon=True)
        self._thread.start()

    def call(self, work: Callable[[DeviceT], ResultT], *, timeout_s: float) -> ResultT:
        """Do ``work(device)`` in its turn. Raises DeviceError."""
        return self._submit(_ORDINARY, work, timeout_s)

    def urgent(self, work: Callable[[DeviceT], ResultT], *, timeout_s: float) -> ResultT:
        """Do ``work(device)`` before anything that still waits. Raises DeviceError.

        An urgent call whose caller gave up waiting is still done as soon as the device is free.
        """
        return self._submit(_URGENT, work, timeout_s)

    def post_urgent(self, work: Callable[[DeviceT], object]) -> None:
        """As ``urgent``, but nobody waits for it; nothing happens on a port that is closed."""
        with self._wake:
            if not self._closed:
                self._push(_URGENT, lambda: work(self.device))

    def _submit(
        self, priority: int, work: Callable[[DeviceT], ResultT], timeout_s: float
    ) -> ResultT:
        with self._wake:
            if self._closed:
                raise NotConnected(f"{self.name} is closed", device=self.name)
            job = self._push(priority, lambda: work(self.device))
        try:
            result: ResultT = job.future.result(timeout=timeout_s + self.grace_s)
        except FutureTimeout:
            if priority != _URGENT:
                job.future.cancel()
            raise NoReply(
                f"{self.name} did not answer within {timeout_s + self.grace_s:.1f} s",
                device=self.name,
                mend="check its cable and power, then start again",
            ) from None
        except DeviceError as error:
            error.device = error.device or self.name
            raise
        except EvenarmError:
            raise
        except Exception as error:
            # A driver that breaks in its own way ends a run no differently from one that says so.
            raise DeviceError(
                f"its driver failed: {type(error).__name__}: {error}",
                device=self.name,
                mend="report it to whoever wrote the driver",
            ) from error
        return result

    def _push(self, priority: int, work: Callable[[], Any] | None) -> _Job:
        """Queue a job; ``_wake`` is held."""
        job = _Job(priority, next(self._numbers), work, Future())
        heapq.heappush(self._jobs, job)
        self._wake.notify()
        return job

    def _serve(self) -> None:
        while True:
            with self._wake:
                while not self._jobs:
                    self._wake.wait()
                job = heapq.heappop(self._jobs)
            if job.work is None:
                job.future.set_result(None)
                return
            if not job.future.set_running_or_notify_cancel():
                continue
            try:
                result = job.work()
            except BaseException as error:  # noqa: BLE001 - handed to the caller, whatever it is
                job.future.set_exception(error)
            else:
                job.future.set_result(result)

    def close(self) -> None:
        """Close the device in its own thread and end the thread. Idempotent."""
        with self._wake:
            if self._closed:
                return
            self._closed = True
            for work in (self.device.close, None):
                self._push(_LAST, work)
        self._thread.join(timeout=self.grace_s)
