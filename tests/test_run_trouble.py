"""Runs in trouble: stops that get lost, errors on top of errors, watchers that go away."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from test_run import bench_folder, session
from test_run_killed import ENVIRONMENT, evenarm

from bench.errors import JournalError
from bench.journal import open_journal
from bench.procedure.conductor import Conductor
from bench.procedure.devices import open_devices
from bench.procedure.guard import Guard
from bench.procedure.scanning import perform_step_scan
from bench.quantities import StagePosition
from drivers.contracts import Detector, GarbledReply, StageState
from drivers.simulated.detector import SimulatedDetector
from drivers.simulated.stage import SimulatedStage


def kinds(run) -> list[str]:
    with open_journal(run.spec.records_url, write=False) as journal:
        return [entry.kind for entry in journal.entries()]


def stop_after(run, blocks: int) -> None:
    """Press stop when so many blocks of readings were kept."""
    keep, seen = run._board.readings, []

    def kept(part):
        keep(part)
        seen.append(part)
        if len(seen) == blocks:
            run.stop("key")

    run._board.readings = kept


@pytest.fixture
def lossy_stop(monkeypatch):
    """The first stops after arming are lost on the line; how many is in the list."""
    lost = [0]
    send = SimulatedStage.stop

    def stop(self, *, timeout_s):
        if self.state(timeout_s=1.0).moving and lost[0] > 0:
            lost[0] -= 1
            raise GarbledReply("noise on the line", device="stage")
        send(self, timeout_s=timeout_s)

    monkeypatch.setattr(SimulatedStage, "stop", stop)
    return lost


def test_a_stop_that_is_lost_is_sent_again(tmp_path, lossy_stop):
    lossy_stop[0] = 4
    run = session(bench_folder(tmp_path), 3)
    stop_after(run, 3)
    state = run.run()
    assert state.outcome == "stopped"
    assert state.at_rest
    assert not run.view().stage_moving


def test_a_stop_that_never_arrives_is_a_fault_and_nobody_says_that_nothing_moves(
    tmp_path, lossy_stop
):
    lossy_stop[0] = 10**9
    folder = bench_folder(tmp_path)
    run = session(folder, 3)
    stop_after(run, 1)
    moving = SimulatedStage.state

    def always_moving(self, *, timeout_s) -> StageState:
        state = moving(self, timeout_s=timeout_s)
        return StageState(state.position_m, state.time_s, True) if run._stop_wanted else state

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(SimulatedStage, "state", always_moving)
        state = run.run()
    assert state.outcome == "fault"
    assert "power switch" in state.reason
    view = run.view()
    assert "MAY STILL MOVE" in view.doing
    assert "power switch" in view.next_action


def test_a_stop_in_the_middle_of_a_call_is_a_stop(tmp_path, monkeypatch):
    run = session(bench_folder(tmp_path), 3)
    take = SimulatedDetector.take
    seen = []

    def cut_short(self, duration_s, *, timeout_s):
        seen.append(1)
        if len(seen) == 10:
            run.stop("key")
            raise GarbledReply("half a reply", device="detector")
        return take(self, duration_s, timeout_s=timeout_s)

    monkeypatch.setattr(SimulatedDetector, "take", cut_short)
    assert run.run().outcome == "stopped"
    assert kinds(run)[-3:] == ["stop-requested", "stopped", "run-ended"]


def test_what_went_wrong_first_is_what_is_told_and_the_axis_is_stopped_before(
    tmp_path, monkeypatch
):
    """The disk fills up in mid-sweep, and then the detector does not answer either."""
    run = session(bench_folder(tmp_path), 3)
    moving_at_end = []

    def full(self, *_args, **_kwargs):
        raise JournalError("the disk is full", where="journal", mend="make room")

    def silent(self: Detector, *, timeout_s):
        world = self.world  # type: ignore[attr-defined]
        moving_at_end.append(world.motor_s() < world.path.rest_s - 0.2)
        raise GarbledReply("nothing sensible", device="detector")

    monkeypatch.setattr("bench.journal.book.Journal.append_readings", full)
    monkeypatch.setattr(SimulatedDetector, "stop_stream", silent)
    assert run.perform() is None
    assert isinstance(run.error, JournalError)
    assert moving_at_end == [False]
    view = run.view()
    assert view.outcome == "fault"
    assert "disk is full" in view.reason
    assert "nothing moves" in view.doing


def test_a_fault_of_the_program_itself_is_written_down_with_its_text(tmp_path, monkeypatch):
    run = session(bench_folder(tmp_path), 3)

    def broken(*_args, **_kwargs):
        raise ZeroDivisionError("a slip")

    monkeypatch.setattr(Conductor, "_locate", broken)
    assert run.perform() is None
    assert run.error is not None
    with open_journal(run.spec.records_url, write=False) as journal:
        end = list(journal.entries())[-1]
    assert end.kind == "run-ended"
    assert "ZeroDivisionError: a slip" in end.body["reason"]


def test_a_stage_that_is_not_there_at_the_start_is_named(tmp_path, monkeypatch):
    run = session(bench_folder(tmp_path), 3)
    ask, seen = SimulatedStage.state, []

    def state(self, *, timeout_s):
        seen.append(1)
        if len(seen) > 1:
            raise GarbledReply("no sense in it", device="stage")
        return ask(self, timeout_s=timeout_s)

    monkeypatch.setattr(SimulatedStage, "state", state)
    ended = run.run()
    assert ended.outcome == "fault"
    assert "no sense in it" in ended.reason
    assert kinds(run)[0] == "run-started"
    assert kinds(run)[-1] == "run-ended"


def test_a_long_settling_time_lets_no_lease_lapse(tmp_path):
    folder = bench_folder(tmp_path)
    path = folder / "bench.toml"
    path.write_text(path.read_text().replace('settle = "50 ms"', 'settle = "4 s"'))
    run = session(folder, 3, pace=40.0)
    run.start()
    guard = None
    while run._guard is None:
        assert not run.finished
    guard = run._guard
    guard._lease_s = 0.08  # 3.2 s of bench time at this pace: less than the settling takes
    while run.view().stage_position_m in {None, 7.5e-3}:
        assert not run.finished, run.error
    run.close()
    assert not guard.lapsed


QUIET = """
[truth]
zero = "12.505 mm"
[detector]
noise = "1 nV"
adc_bits = 24
lag = "{lag}"
"""


def test_a_step_scan_waits_for_a_detector_that_lags(tmp_path):
    """What is read at a step belongs to that step, as it does where nothing lags."""
    seen = []
    for own in ("0 ms", "300 ms"):
        folder = bench_folder(tmp_path / own.replace(" ", ""))
        bench = folder / "bench.toml"
        bench.write_text(bench.read_text().replace('lag = "0 ms"', f'lag = "{own}"'))
        (folder / "world.toml").write_text(QUIET.format(lag=own))
        spec = session(folder, 3).spec
        devices = open_devices(spec)
        guard = Guard(devices.stage, spec.stage, watch=False)
        try:
            guard.arm()
            guard.start_move(StagePosition(12.4e-3), 1e-3)
            while guard.state().moving:
                guard.renew()
            readings, _ = perform_step_scan(
                guard,
                devices,
                spec,
                start_m=12.504e-3,
                stop_m=12.506e-3,
                increment_m=0.1e-6,
                keep=lambda part: None,
                watch=lambda state: None,
                may_go_on=lambda: None,
            )
        finally:
            guard.close()
            devices.close()
        seen.append(readings.signal)
    assert np.ptp(seen[0]) > 0.5  # there are fringes to be wrong about
    assert np.max(np.abs(seen[1] - seen[0])) < 5e-3


def test_a_reader_that_goes_away_does_not_leave_the_stage_to_itself(tmp_path):
    """Standard error is a pipe that is closed at once: the run goes on and ends in good order."""
    assert evenarm(tmp_path, "new", "table").returncode == 0
    child = subprocess.Popen(
        [sys.executable, "-m", "bench", "run", "path-equalisation", "--unattended", "--json"],
        cwd=tmp_path / "table",
        stdin=subprocess.DEVNULL,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        env=ENVIRONMENT,
    )
    assert child.stderr is not None
    child.stderr.close()
    assert child.stdout is not None
    output = child.stdout.read()
    assert child.wait(timeout=60) == 0
    child.stdout.close()
    assert json.loads(output)["outcome"] == "accepted"


def test_blank_names_acknowledge_nothing(tmp_path):
    assert evenarm(tmp_path, "new", "table").returncode == 0
    for words in (("--acknowledge", "  "), ("--operator", "\x1b")):
        said = evenarm(tmp_path / "table", "run", "path-equalisation", "--unattended", *words)
        assert said.returncode == 2
        assert "a name is needed" in said.stderr
    assert not (Path(tmp_path) / "table" / "logs" / "journal.sqlite3").exists()
