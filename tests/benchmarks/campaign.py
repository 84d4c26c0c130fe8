"""The main job over many seeds of the shipped simulated bench, judged against its hidden truth.

    python tests/benchmarks/campaign.py [--seeds 40] [--from 1]

A run is wrong if it was accepted although the stage was left further from zero OPD than [accept]
allows *and* the zero is off by more than five of its stated standard uncertainties. Prints a line
a seed and the table of the whole; exits with 1 where a run was wrong or under 39 of 40 accepted.
"""

from __future__ import annotations

import argparse
import statistics
import sys
import tempfile
import time
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from bench.procedure.session import RunOptions, RunSession
from bench.procedure.text import find_procedure
from bench.spec import load_bench
from drivers import registry

SHIPPED = Path(__file__).parents[2] / "bench" / "shipped" / "default" / "bench.toml"


def one(seed: int, records: Path) -> dict[str, Any]:
    """One run; lengths in nm, OPD where the name says so."""
    spec = load_bench(
        SHIPPED,
        declared=registry.declared,
        known_drivers=registry.names,
        records_folder=records,
        seed=seed,
    )
    session = RunSession(
        spec,
        find_procedure("path-equalisation", None),
        RunOptions("campaign", unattended=True),
        now=lambda: datetime.now(UTC),
        run_id=f"seed-{seed}",
    )
    began = time.perf_counter()
    state = session.run()
    row: dict[str, Any] = {
        "seed": seed,
        "outcome": state.outcome,
        "wall": time.perf_counter() - began,
        "bench": state.time_s,
        "legs": state.legs_run,
        "reason": state.reason,
    }
    if state.verdict is not None and session.truth is not None:
        residual = session.truth.residual_opd_m
        verdict = state.verdict
        row["off"] = (verdict["zero_m"] - session.truth.zero_m) * 1e9
        row["u"] = verdict["zero_u_m"] * 1e9
        row["residual"] = residual * 1e9
        row["claimed"] = verdict["residual_opd_m"] * 1e9
        row["u_residual"] = verdict["residual_u_m"] * 1e9
        row["wrong"] = (
            state.outcome == "accepted"
            and abs(residual) > spec.accept.residual_opd_m
            and abs(row["off"]) > 5.0 * row["u"]
        )
    return row


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--seeds", type=int, default=40)
    parser.add_argument("--from", dest="first", type=int, default=1)
    chosen = parser.parse_args()
    rows = []
    print(
        "seed  outcome    off nm    u nm  off/u  residual OPD nm  (claimed  u)  legs  bench s"
        "  wall s"
    )
    for seed in range(chosen.first, chosen.first + chosen.seeds):
        with tempfile.TemporaryDirectory() as folder:
            row = one(seed, Path(folder))
        rows.append(row)
        if "off" in row:
            print(
                f"{seed:4d}  {row['outcome']:<9}{row['off']:8.2f}{row['u']:8.2f}"
                f"{row['off'] / row['u']:7.2f}{row['residual']:12.1f}"
                f"{row['claimed']:15.1f}{row['u_residual']:6.1f}{row['legs']:5d}"
                f"{row['bench']:9.1f}{row['wall']:8.2f}",
                flush=True,
            )
        else:
            print(f"{seed:4d}  {row['outcome']:<9}  {row['reason']}", flush=True)
    accepted = [row for row in rows if row["outcome"] == "accepted"]
    wrong = [row for row in rows if row.get("wrong")]
    print(f"\naccepted {len(accepted)} of {len(rows)}, wrong {len(wrong)}")
    if len(accepted) > 1:
        pulls = [row["off"] / row["u"] for row in accepted]
        rest = [(r["claimed"] - r["residual"]) / r["u_residual"] for r in accepted]
        covered = sum(abs(pull) < 1.96 for pull in pulls)
        print(f"zero: rms of off/u {statistics.fmean(p * p for p in pulls) ** 0.5:.2f}, ", end="")
        print(f"within 1.96 u {covered} of {len(pulls)}, largest {max(map(abs, pulls)):.2f}")
        spread = statistics.fmean(value * value for value in rest) ** 0.5
        print(f"residual OPD: rms of (claimed - true)/u {spread:.2f}")
        for name, unit in (("bench", "s"), ("wall", "s"), ("legs", "")):
            values = [row[name] for row in accepted]
            print(
                f"{name}: median {statistics.median(values):.1f} {unit}, largest {max(values):.1f}"
            )
    return 1 if wrong or len(accepted) < 39 * len(rows) / 40 else 0


if __name__ == "__main__":
    sys.exit(main())
