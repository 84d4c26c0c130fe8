"""A run without a bench, for the screen's tests: every moment of a run as a snapshot.

Run as a program, it shows one of these moments in the terminal it is started in:

    python tests/test_tui_fake.py scanning CALLS_FILE [quirk]
"""

from __future__ import annotations

import dataclasses
import os
import sys
import time
from pathlib import Path

import numpy as np

from bench.fringes.model import Envelope, Estimate, Located
from bench.procedure.live import LiveView, Question, StepView
from bench.tui.control import RunControl

TITLES = (
    "Cautions",
    "The bench is ready",
    "Find the packet",
    "Locate the zero",
    "Second scan",
    "Go to the zero",
    "Judge the result",
    "Keep the record",
)
ZERO_M = 13.2184012e-3

CAUTION = Question(
    "q1",
    "acknowledge",
    "Cautions",
    (
        "Read these cautions. They are acknowledged by name and kept in the record.",
        "Local rules come first. Ask the person responsible before you start if anything is "
        "unclear. Safety contact here: the optics workshop, room 12.",
        "Never look along a beam or into an eyepiece while a laser is on. Take off rings and "
        "watches. Put beam stops where beams end.",
        "red: Label says laser class 3R: avoid any direct view of the beam or of its mirror "
        "reflections.",
        "white: No risk group is given: do not look into the lamp, shield it, and mind hot "
        "housings and high voltage.",
        "The stage moves by itself. Keep fingers, tools and cables out of its travel, and look "
        "that no optic can hit another within the limits.",
        "The software stop is a program's stop. Know where the power switch of the controller is.",
    ),
)
CONFIRM = Question(
    "q2",
    "confirm",
    "The bench is ready",
    (
        "Both beams reach the detector and overlap on it.",
        "Nothing touches the stage or stands in its way.",
        "Covers are closed against draughts, and the room light is off.",
    ),
)

LOST = Question(
    "position",
    "confirm",
    "The stage position is not known",
    (
        "The run before this one was cut off while the stage moved.",
        "Look at the stage. It must be free to travel to its origin.",
        "Yes: it is homed now, which moves it. No: the run ends and nothing moves.",
    ),
)
HELD = (
    "Another process writes to this journal",
    "where: /home/lab/benches/north-table/logs/journal.db",
    "why: held by ada, process 1031 on north, since 2024-05-06 07:08:09",
    "mend: end that process, or give this bench another journal with records = in bench.toml",
)


def steps(now: int, state: str = "now", detail: str = "") -> tuple[StepView, ...]:
    """All steps before ``now`` done, that one in ``state``, the rest open."""
    return tuple(
        StepView(title, "done" if k < now else state if k == now else "open", detail)
        for k, title in enumerate(TITLES)
    )


def packet(x_m: np.ndarray, width_m: float = 1.3e-6) -> tuple[np.ndarray, np.ndarray]:
    """Envelope and signal of a white-light packet at ``ZERO_M``; no noise, so that it is the same
    everywhere."""
    envelope = 0.8 * np.exp(-(((x_m - ZERO_M) / width_m) ** 2) / 2)
    return envelope, 1.1 + envelope * np.cos(2 * np.pi * 2 * (x_m - ZERO_M) / 600e-9 + 0.7)


SCAN_X = np.linspace(ZERO_M - 6.1e-6, ZERO_M + 5.2e-6, 1500)
PICTURE_X = np.linspace(SCAN_X[0], SCAN_X[-1], 200)
LOCATED = Located(
    found=True,
    zero=Estimate(ZERO_M, 12e-9),
    picture=Envelope(
        PICTURE_X, packet(PICTURE_X)[1], packet(PICTURE_X)[0], np.full(PICTURE_X.shape, 1.1)
    ),
)

BEFORE = LiveView(
    run_id="r1",
    bench_name="North table",
    procedure="path-equalisation",
    simulated=True,
    steps=steps(-1),
    doing="nothing moves",
    next_action="Begin the run",
    stage_position_m=0.0,
    stage_known=True,
    zero_m=12.5e-3,
    half_width_m=4.75e-3,
    half_width_start_m=4.75e-3,
    opd_per_m=2.00054,
    accept_residual_opd_m=200e-9,
    head="9f3c21ab77aa01d2c4e8b6f0",
)
ASKED = dataclasses.replace(
    BEFORE, steps=steps(0), question=CAUTION, doing="waiting for you; nothing moves", elapsed_s=3
)
SCANNING = dataclasses.replace(
    BEFORE,
    steps=steps(2, detail="red is seen from furthest away and sweeps the whole range"),
    doing="sweeping 13.1900 to 13.2500 mm with white",
    next_action="Wait; keep hands and draughts away",
    source="white",
    stage_position_m=13.2174e-3,
    stage_moving=True,
    detector_level=1.234,
    trace_x_m=SCAN_X[:760],
    trace_signal=packet(SCAN_X[:760])[1],
    trace_label="search 2, white",
    zero_m=13.2e-3,
    half_width_m=61e-6,
    elapsed_s=102.4,
    remaining_s=91.0,
    progress=0.43,
)
FOUND = dataclasses.replace(
    SCANNING,
    steps=steps(4),
    doing="moving to 13.1984 mm, to approach from below",
    trace_x_m=SCAN_X,
    trace_signal=packet(SCAN_X)[1],
    trace_label="first, white",
    located=LOCATED,
    zero_m=ZERO_M,
    zero_standard_uncertainty_m=12e-9,
    half_width_m=24e-9,
    progress=0.91,
    elapsed_s=141.0,
    remaining_s=38.0,
)
ENDED = dataclasses.replace(
    FOUND,
    steps=steps(8),
    doing="the run has ended; nothing moves",
    stage_moving=False,
    stage_position_m=13.21841e-3,
    residual_opd_m=17e-9,
    residual_opd_standard_uncertainty_m=31e-9,
    progress=None,
    elapsed_s=187.0,
    remaining_s=None,
    head="41d07be2c0ff5a93b17e6d20",
)
VIEWS = {
    "before": BEFORE,
    "caution": ASKED,
    "confirm": dataclasses.replace(ASKED, steps=steps(1), question=CONFIRM),
    "scanning": SCANNING,
    "rough": dataclasses.replace(
        FOUND,
        steps=steps(
            2,
            detail="Narrows ±4.75 mm to ±12 µm with red before the packet of white is looked for",
        ),
        doing="moving to 7.2916 mm, overshoot before the run-up",
        zero_m=13.22e-3,
        zero_standard_uncertainty_m=None,
        half_width_m=12e-6,
        roughly_located=True,
        stage_position_m=11.71210e-3,
        located=None,
    ),
    "located": FOUND,
    "accepted": dataclasses.replace(
        ENDED,
        outcome="accepted",
        next_action="Done. The stage stands at the zero; leave it there",
    ),
    "rejected": dataclasses.replace(
        ENDED,
        steps=steps(6, "failed"),
        outcome="rejected",
        reason="the two scans disagree by 214 nm of OPD, more than scans_agree = 100 nm allows",
        next_action="Read the reason and mend it; a new run starts from the shell",
    ),
    "not-found": dataclasses.replace(
        SCANNING,
        steps=steps(2, "failed"),
        stage_moving=False,
        outcome="not found",
        reason="no packet within 7.75 mm to 17.25 mm",
        next_action="",
    ),
    "fault": dataclasses.replace(
        SCANNING,
        steps=steps(2, "failed"),
        stage_moving=False,
        stage_known=False,
        outcome="fault",
        reason="the stage did not answer within 0.5 s; is its controller switched on?",
        next_action="Mend what the reason names; a new run starts from the shell",
        detector_saturated=True,
        progress=None,
        remaining_s=None,
    ),
    "lost": dataclasses.replace(
        ASKED,
        steps=steps(-1),
        question=LOST,
        stage_position_m=7.5e-3,
        position_trusted=False,
    ),
    "runaway": dataclasses.replace(
        SCANNING,
        steps=steps(2, "failed"),
        doing="the run has ended; THE STAGE MAY STILL MOVE",
        stage_position_m=7.67766e-3,
        stage_moving=False,
        position_trusted=False,
        at_rest=False,
        outcome="fault",
        reason="stage: it does not answer; look at its cable and its supply, but the stage did "
        "not confirm that it stands still: use the power switch of its controller",
        next_action="Use the power switch of the stage's controller",
        progress=None,
        remaining_s=None,
    ),
    "held": dataclasses.replace(
        BEFORE,
        stage_position_m=None,
        stage_known=False,
        outcome="fault",
        doing="the run has ended; nothing moves",
        next_action="Mend what is named; a new run starts from the shell",
        reason=" - ".join(HELD),
        error_lines=HELD,
        head="",
    ),
    "stopped": dataclasses.replace(
        SCANNING,
        steps=steps(2, "failed"),
        stage_moving=False,
        doing="the run has ended; nothing moves",
        outcome="stopped",
        reason="software stop pressed",
        next_action="Look where the stage stands; a new run starts from the shell",
        progress=None,
        remaining_s=None,
    ),
}


class FakeControl:
    """Stands at one moment until told otherwise; keeps every call in ``calls`` (and in a file)."""

    def __init__(self, at: str, *, log: Path | None = None, stops_at_once: bool = True) -> None:
        self.at = at
        self.calls: list[tuple[object, ...]] = []
        self.started = at != "before"
        self.finished = VIEWS[at].outcome is not None
        self.stops_at_once = stops_at_once
        self._log = log

    def _note(self, *call: object) -> None:
        self.calls.append(call)
        if self._log is not None:
            with self._log.open("a") as file:
                file.write(" ".join(str(part) for part in call) + "\n")

    @property
    def stops(self) -> list[object]:
        return [call[1] for call in self.calls if call[0] == "stop"]

    def go(self, at: str) -> None:
        self.at = at
        self.finished = VIEWS[at].outcome is not None

    def view(self) -> LiveView:
        return VIEWS[self.at]

    def start(self) -> None:
        self._note("start")
        self.started = True
        self.go("caution")

    def answer(self, question_id: str, value: str | bool) -> None:
        self._note("answer", question_id, value)
        self.go({"q1": "confirm", "q2": "scanning" if value else "stopped"}[question_id])

    def stop(self, reason: str) -> None:
        self._note("stop", reason)
        if self.stops_at_once and self.started and not self.finished:
            self.go("stopped")

    def close(self, timeout_s: float) -> None:
        self._note("close")


class HangingControl(FakeControl):
    """After a while its ``view`` never comes back, and the screen hangs with it."""

    looks = 0

    def view(self) -> LiveView:
        self.looks += 1
        while self.looks > 8:
            time.sleep(0.05)
        return super().view()


class BrokenControl(FakeControl):
    """Gives the screen something that cannot be drawn."""

    looks = 0

    def view(self) -> LiveView:
        self.looks += 1
        view = super().view()
        return dataclasses.replace(view, opd_per_m="broken") if self.looks > 5 else view


def test_the_fake_is_what_the_screen_asks_for() -> None:
    control: RunControl = FakeControl("before")
    control.start()
    control.answer("q1", "A. Person")
    control.answer("q2", True)
    assert control.view() is SCANNING
    control.stop("test")
    assert control.finished


def main() -> int:
    from bench.errors import EvenarmError
    from bench.tui import leave
    from bench.tui.run import run_app

    at, log, quirk = sys.argv[1], Path(sys.argv[2]), (sys.argv[3:] or [""])[0]
    leave.GRACE_S = 0.3
    kind = {"hang": HangingControl, "broken": BrokenControl}.get(quirk, FakeControl)
    try:
        status = run_app(kind(at, log=log))
    except EvenarmError as error:
        print(error, file=sys.stderr)
        return error.exit_status
    if status != 129:  # after SIGHUP there may be nobody to tell
        print(f"left with {status}", flush=True)
    return status


if __name__ == "__main__":
    sys.path.insert(0, os.getcwd())
    sys.exit(main())
