"""A run that is killed in mid-scan: nothing acknowledged is lost, and the next start asks first."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
from pathlib import Path

import pytest

from bench.journal import open_journal, verify

# Prints every entry after the journal has acknowledged it, and nothing else.
RUN = """
import sys
from bench.journal.book import Journal

def telling(method):
    def told(self, *args, **kwargs):
        entry = method(self, *args, **kwargs)
        sys.stdout.write(f"{entry.seq} {entry.kind} {entry.sha256}\\n")
        sys.stdout.flush()
        return entry
    return told

Journal.append = telling(Journal.append)
Journal.append_readings = telling(Journal.append_readings)
from bench.cli import app
app(["run", "path-equalisation", "--unattended", "--pace", PACE], standalone_mode=False)
"""


def evenarm(folder: Path, *words: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "bench", *words],
        cwd=folder,
        capture_output=True,
        text=True,
        timeout=100,
        check=False,
        stdin=subprocess.DEVNULL,
        env=ENVIRONMENT,
    )


ENVIRONMENT = {**os.environ, "PYTHONPATH": str(Path(__file__).parent.parent)}


@pytest.mark.parametrize("after", [3, 29])
def test_killed_in_mid_scan(tmp_path, after):
    folder = tmp_path / "table"
    assert evenarm(tmp_path, "new", "table").returncode == 0
    child = subprocess.Popen(
        [sys.executable, "-c", RUN.replace("PACE", '"20"')],
        cwd=folder,
        stdout=subprocess.PIPE,
        stderr=subprocess.DEVNULL,
        stdin=subprocess.DEVNULL,
        text=True,
        env=ENVIRONMENT,
    )
    assert child.stdout is not None
    told: list[list[str]] = []
    for line in child.stdout:
        told.append(line.split())
        if sum(kind == "readings" for _, kind, _ in told) == after:
            os.kill(child.pid, signal.SIGKILL)
            break
    told += [line.split() for line in child.stdout if line.endswith("\n")]
    child.wait(timeout=30)
    child.stdout.close()
    assert child.returncode == -signal.SIGKILL

    url = f"sqlite:///{folder}/logs/journal.sqlite3"
    assert verify(url).intact
    with open_journal(url, write=False) as journal:
        kept = {str(entry.seq): entry for entry in journal.entries()}
        for seq, kind, sha256 in told:
            assert (kept[seq].kind, kept[seq].sha256) == (kind, sha256)
            if kind == "readings":
                assert journal.block(kept[seq])["signal"].size > 0
    shown = json.loads(evenarm(folder, "records", "verify", "--json").stdout)
    assert (shown["schema"], shown["intact"]) == ("evenarm.verify/1", True)
    assert shown["entries"] >= len(told)

    # The next start says that the position is not known, and moves nothing unless told.
    again = evenarm(folder, "run", "path-equalisation", "--unattended")
    assert again.returncode == 2
    assert "the stage position is not known" in again.stderr
    assert "Traceback" not in again.stderr
    assert (
        json.loads(evenarm(folder, "records", "verify", "--json").stdout)["head"] == shown["head"]
    )

    answered = evenarm(
        folder, "run", "path-equalisation", "--unattended", "--acknowledge", "Ada", "--json"
    )
    assert answered.returncode == 0, answered.stderr
    assert json.loads(answered.stdout)["outcome"] == "accepted"
    assert evenarm(folder, "run", "path-equalisation", "--unattended").returncode == 0


def test_a_termination_is_a_software_stop(tmp_path):
    assert evenarm(tmp_path, "new", "table").returncode == 0
    folder = tmp_path / "table"
    child = subprocess.Popen(
        [sys.executable, "-c", RUN.replace("PACE", '"20"')],
        cwd=folder,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        stdin=subprocess.DEVNULL,
        text=True,
        env=ENVIRONMENT,
    )
    assert child.stdout is not None
    for line in child.stdout:
        if line.split()[1:2] == ["readings"]:
            child.send_signal(signal.SIGTERM)
            break
    output, _ = child.communicate(timeout=60)
    kinds = [line.split()[1] for line in output.splitlines() if line[:1].isdigit()]
    assert kinds[-3:] == ["stop-requested", "stopped", "run-ended"]
    assert "STOPPED: the program was asked to end (SIGTERM)" in output
    # A stop leaves the position known, so the next run needs nobody.
    assert evenarm(folder, "run", "path-equalisation", "--unattended").returncode == 0
