"""A real terminal around the screen: signals, a lost terminal, a hung screen, a failed screen."""

from __future__ import annotations

import contextlib
import os
import select
import signal
import subprocess
import sys
import termios
import threading
import time
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import pytest
from test_tui_fake import FakeControl

from bench.errors import UsageError
from bench.tui.leave import Watch
from bench.tui.run import require_terminal, run_app

ROOT = Path(__file__).parent.parent
DEADLINE_S = 30.0
# The child makes the pseudo-terminal its controlling one, as a shell's child has it.
_LAUNCH = (
    "import fcntl, os, sys, termios; fcntl.ioctl(0, termios.TIOCSCTTY, 0); "
    "os.execv(sys.executable, [sys.executable, *sys.argv[1:]])"
)


@dataclass
class Terminal:
    """A pseudo-terminal with the screen in it."""

    master: int
    slave: int
    process: subprocess.Popen[bytes]
    log: Path
    seen: bytes = b""

    def read_until(self, wanted: bytes) -> None:
        """Read what the screen draws until ``wanted`` is among it."""
        end_s = time.monotonic() + DEADLINE_S
        while wanted not in self.seen:
            left_s = end_s - time.monotonic()
            assert left_s > 0, f"{wanted!r} did not appear: {self.seen[-2000:]!r}"
            if select.select([self.master], [], [], left_s)[0]:
                self.seen += os.read(self.master, 65536)

    def drain(self) -> int:
        """Read until the process has ended; its exit status."""
        end_s = time.monotonic() + DEADLINE_S
        while time.monotonic() < end_s:
            if select.select([self.master], [], [], 0.05)[0]:
                self.seen += os.read(self.master, 65536)
            elif self.process.poll() is not None:
                return self.process.returncode
        raise AssertionError(f"the screen did not end: {self.seen[-2000:]!r}")

    def press_until_ended(self, key: bytes) -> int:
        """Press a key about once in two seconds until the process has ended; its exit status."""
        end_s, press_s = time.monotonic() + DEADLINE_S, 0.0
        while time.monotonic() < end_s:
            if time.monotonic() >= press_s:
                os.write(self.master, key)
                press_s = time.monotonic() + 2.0
            if select.select([self.master], [], [], 0.05)[0]:
                self.seen += os.read(self.master, 65536)
            elif self.process.poll() is not None:
                return self.process.returncode
        raise AssertionError(f"the screen did not end: {self.seen[-2000:]!r}")

    def calls(self) -> list[str]:
        return self.log.read_text().splitlines() if self.log.exists() else []

    def is_sane(self) -> bool:
        """Whether the alternate screen was left, the cursor shown, echo and line mode on again."""
        flags = termios.tcgetattr(self.slave)[3]
        return (
            self.seen.rfind(b"\x1b[?1049l") > self.seen.rfind(b"\x1b[?1049h") > -1
            and self.seen.rfind(b"\x1b[?25h") > self.seen.rfind(b"\x1b[?25l")
            and bool(flags & termios.ECHO)
            and bool(flags & termios.ICANON)
        )


@pytest.fixture
def opened(tmp_path: Path) -> Iterator[object]:
    terminals: list[Terminal] = []

    def open_terminal(at: str, quirk: str = "") -> Terminal:
        master, slave = os.openpty()
        termios.tcsetwinsize(slave, (24, 80))
        log = tmp_path / "calls"
        arguments = ["-W", "error", str(ROOT / "tests" / "test_tui_fake.py"), at, str(log), quirk]
        process = subprocess.Popen(
            [sys.executable, "-c", _LAUNCH, *arguments],
            stdin=slave,
            stdout=slave,
            stderr=slave,
            cwd=ROOT,
            env={**os.environ, "TERM": "xterm-256color", "PYTHONPATH": str(ROOT)},
            start_new_session=True,
        )
        terminals.append(Terminal(master, slave, process, log))
        return terminals[-1]

    yield open_terminal
    for terminal in terminals:
        if terminal.process.poll() is None:
            terminal.process.kill()
        terminal.process.wait()
        for descriptor in (terminal.master, terminal.slave):
            with contextlib.suppress(OSError):
                os.close(descriptor)


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGHUP, signal.SIGINT])
def test_a_signal_stops_the_stage_and_restores_the_terminal(opened, number: int) -> None:
    terminal = opened("scanning")
    terminal.read_until(b"SOFTWARE STOP")
    terminal.process.send_signal(number)
    assert terminal.drain() == 128 + number
    assert terminal.calls() == [f"stop {signal.Signals(number).name} received", "close"]
    assert terminal.is_sane()


@pytest.mark.parametrize("key", [b"\x03", b"\x1b[19~"], ids=["ctrl+c", "f8"])
def test_the_stop_key_through_a_real_terminal(opened, key: bytes) -> None:
    terminal = opened("caution")
    terminal.read_until(b"SOFTWARE STOP")
    os.write(terminal.master, key)
    terminal.read_until(b"Reason: software stop pressed")
    # On a busy machine a key hit in the very frame in which the run ends may be lost: press again.
    assert terminal.press_until_ended(b"q") == 130
    assert terminal.calls() == ["stop software stop pressed", "close"]
    assert terminal.is_sane()
    assert b"left with 130" in terminal.seen


def test_a_lost_terminal_stops_the_stage(opened) -> None:
    terminal = opened("scanning")
    terminal.read_until(b"SOFTWARE STOP")
    os.close(terminal.slave)
    os.close(terminal.master)
    assert terminal.process.wait(DEADLINE_S) == 128 + signal.SIGHUP
    calls = terminal.calls()
    assert calls[0] == "stop SIGHUP received"
    assert calls[-1] == "close"


def test_a_hung_screen_is_left_by_force(opened) -> None:
    terminal = opened("scanning", "hang")
    terminal.read_until(b"SOFTWARE STOP")
    terminal.process.send_signal(signal.SIGTERM)
    assert terminal.drain() == 128 + signal.SIGTERM
    assert terminal.calls()[0] == "stop SIGTERM received"
    assert "close" in terminal.calls()
    assert terminal.is_sane()


def test_a_failed_screen_stops_the_stage_and_says_so(opened) -> None:
    terminal = opened("located", "broken")
    assert terminal.drain() == 3
    assert terminal.calls()[0] == "stop the screen failed"
    assert terminal.calls()[-1] == "close"
    assert terminal.is_sane()
    told = terminal.seen[terminal.seen.rfind(b"\x1b[?1049l") :].decode()
    assert "The screen failed and the run was stopped" in told
    assert "TypeError" in told
    assert "look where the stage stands" in told


def test_without_a_terminal_it_says_what_to_do(monkeypatch) -> None:
    read, write = os.pipe()
    with os.fdopen(read) as stdin, os.fdopen(write, "w") as stdout:
        monkeypatch.setattr(sys, "stdin", stdin)
        monkeypatch.setattr(sys, "stdout", stdout)
        control = FakeControl("before")
        with pytest.raises(UsageError) as caught:
            run_app(control)
        assert "evenarm run path-equalisation --unattended" in caught.value.mend
        assert caught.value.exit_status == 2
        assert control.calls == []
        monkeypatch.setattr(sys, "stdin", None)
        with pytest.raises(UsageError):
            require_terminal()


# --- the watch -----------------------------------------------------------------------------------


class Ticks:
    def __init__(self) -> None:
        self.now = 0.0

    def __call__(self) -> float:
        return self.now


def watch_of(control: FakeControl, ticks: Ticks) -> Watch:
    return Watch(control, lambda status: None, now_s=ticks, patience_s=10.0)


def test_a_silent_screen_stops_a_run_once() -> None:
    control, ticks = FakeControl("scanning", stops_at_once=False), Ticks()
    watch = watch_of(control, ticks)
    watch.check()  # no screen yet
    watch.beat()
    ticks.now = 9.9
    watch.check()
    assert control.stops == []
    ticks.now = 10.1
    watch.check()
    watch.check()
    assert control.stops == ["the screen stopped responding"]


@pytest.mark.parametrize("at", ["before", "accepted"])
def test_a_silent_screen_without_a_run_is_let_be(at: str) -> None:
    control, ticks = FakeControl(at), Ticks()
    watch = watch_of(control, ticks)
    watch.beat()
    ticks.now = 100.0
    watch.check()
    assert control.stops == []


def test_the_watch_stops_first_and_then_asks_and_then_forces() -> None:
    control = FakeControl("scanning")
    order: list[str] = []
    forced = threading.Event()

    def ask(status: int) -> None:
        order.append(f"ask {status} after {control.stops}")

    def force(_: object, status: int) -> None:
        order.append(f"force {status}")
        forced.set()

    watch = Watch(control, ask, last_resort=force, grace_s=0.01)
    watch.start()
    watch.tell(signal.SIGTERM)
    assert forced.wait(DEADLINE_S)
    watch.join(DEADLINE_S)
    assert order == ["ask 143 after ['SIGTERM received']", "force 143"]


def test_the_watch_ends_with_the_screen() -> None:
    control = FakeControl("accepted")
    watch = Watch(control, lambda status: None)
    watch.start()
    watch.end()
    assert not watch.is_alive()
    assert control.calls == []
