"""How fast the journal is durable, and campaigns that are too long for the test suite.

    python tests/benchmarks/journal.py                  entries a second, readings a second
    python tests/benchmarks/journal.py --kills 200      kill a writer so many times
    python tests/benchmarks/journal.py --every-byte     change every byte of a small journal

``--folder`` chooses the disk; the system's temporary folder may be in memory.
"""

from __future__ import annotations

import argparse
import importlib.util
import sys
import tempfile
import time
from pathlib import Path
from types import ModuleType

import numpy as np

from bench.journal import open_journal, verify

TESTS = Path(__file__).resolve().parent.parent


def tests_of(name: str) -> ModuleType:
    """A test module, for the campaign in it."""
    spec = importlib.util.spec_from_file_location(name, TESTS / f"{name}.py")
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def measure_speed(folder: Path, seconds: float) -> None:
    path = folder / "speed.sqlite3"
    with open_journal(path, write=True, who="benchmark") as journal:
        body = {"source": "white", "target_m": 0.0132184, "speed_m_s": 1e-3, "text": "x" * 100}
        count, start = 0, time.perf_counter()
        while time.perf_counter() - start < seconds:
            journal.append("move-intended", body, run="r", bench_time_s=count * 0.1)
            count += 1
        print(f"{count / (time.perf_counter() - start):12,.0f} durable entries a second")

        # A detector of 10 kHz, read every 100 ms: 1000 readings of time, position and signal.
        rows = np.arange(1000.0)
        blocks, longest_s, start = 0, 0.0, time.perf_counter()
        while time.perf_counter() - start < seconds:
            columns = {"time_s": rows + blocks, "position_m": rows * 1e-7, "signal": np.sin(rows)}
            before = time.perf_counter()
            journal.append_readings("r", "scan", columns)
            longest_s = max(longest_s, time.perf_counter() - before)
            blocks += 1
        elapsed_s = time.perf_counter() - start
        print(f"{1000 * blocks / elapsed_s:12,.0f} durable readings a second in blocks of 1000")
        print(f"{1e3 * longest_s:12.1f} ms, the longest wait for a block (100 ms is due)")
        start = time.perf_counter()
        journal.readings("r", "scan")
        print(f"{1000 * blocks / (time.perf_counter() - start):12,.0f} readings a second read back")
    start = time.perf_counter()
    result = verify(path)
    print(f"{result.entries / (time.perf_counter() - start):12,.0f} entries a second verified")
    assert result.intact


def main() -> int:
    parser = argparse.ArgumentParser(description="Measure the journal.")
    parser.add_argument("--folder", type=Path)
    parser.add_argument("--seconds", type=float, default=3.0)
    parser.add_argument("--kills", type=int, default=0)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--every-byte", action="store_true")
    asked = parser.parse_args()
    with tempfile.TemporaryDirectory(dir=asked.folder) as name:
        folder = Path(name)
        if asked.kills:
            kept = tests_of("test_journal_crash").kill_writers(
                folder / "kills.sqlite3", asked.kills, asked.seed
            )
            print(f"{asked.kills} kills, {kept} acknowledged entries, none lost")
        if asked.every_byte:
            damage = tests_of("test_journal_damage")
            damage.fill(folder / "whole.sqlite3")
            whole = (folder / "whole.sqlite3").read_bytes()
            damage.changed_bytes_are_noticed(
                whole, folder / "changed.sqlite3", list(range(len(whole))), asked.seed
            )
            print(f"{len(whole)} bytes changed one by one, each noticed or without effect")
        if not asked.kills and not asked.every_byte:
            measure_speed(folder, asked.seconds)
    return 0


if __name__ == "__main__":
    sys.exit(main())
