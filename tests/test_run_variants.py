"""The main job on benches that are unlike the shipped one: signs, sides, lags, glass, ends.

Every accepted zero must agree with the hidden truth, and every variant that can be accepted is.
"""

from __future__ import annotations

import re
from pathlib import Path

import pytest
from test_run import bench_folder, session

VARIANTS: dict[str, tuple[list[tuple[str, str]], list[tuple[str, str]]]] = {
    "path factor negative": ([("path_factor = 2", "path_factor = -2")], []),
    "double pass": ([("path_factor = 2", "path_factor = 4")], []),
    "arm by name": (
        [("path_factor = 2", 'moving_arm = "B"\nincreasing = "longer"\nfolds = 2')],
        [],
    ),
    "approach decreasing": ([('"increasing"', '"decreasing"')], []),
    "both": ([('"increasing"', '"decreasing"'), ("path_factor = 2", "path_factor = -2")], []),
    "detector lags": ([('lag = "0 ms"', 'lag = "5 ms"')], [('lag = "0 ms"', 'lag = "5 ms"')]),
    "nothing known of the detector": ([("^dark = .*$", ""), ("^noise = .*$", "")], []),
    "mean wavelength, glass not named": (
        [("^reference_wavelength = .*$", ""), (r"^\[glass\]\n.*\nmaterial = .*$", "")],
        [],
    ),
    "more glass": ([], [(r"thickness = \{.*?\}", 'thickness = "0.5 mm"')]),
    "allowance smaller than the play": ([('"20 um"', '"4 um"')], []),
    "short commands": ([('longest_move = "5 mm"', 'longest_move = "1 mm"')], []),
    "near the end of the travel": (
        [
            ('^zero = "12.5 mm"', 'zero = "0.2 mm"'),
            ('half_width = "5 mm"', 'half_width = "0.2 mm"'),
        ],
        [(r"^zero = \{.*?\}", 'zero = "0.07 mm"')],
    ),
    "drift": ([], [('"10 nm/min"', '"200 nm/min"')]),
}


def edited(path: Path, changes: list[tuple[str, str]]) -> None:
    text = path.read_text(encoding="utf-8")
    for old, new in changes:
        text, count = re.subn(old, new, text, count=1, flags=re.MULTILINE)
        assert count == 1, old
    path.write_text(text, encoding="utf-8")


@pytest.mark.parametrize("name", VARIANTS)
def test_accepted_and_true(tmp_path, name):
    folder = bench_folder(tmp_path)
    in_bench, in_world = VARIANTS[name]
    edited(folder / "bench.toml", in_bench)
    edited(folder / "world.toml", in_world)
    run = session(folder, 11)
    state = run.run()
    assert state.outcome == "accepted", state.reason
    assert state.verdict is not None
    assert run.truth is not None
    off = (state.verdict["zero_m"] - run.truth.zero_m) / state.verdict["zero_u_m"]
    claimed = state.verdict["residual_opd_m"] - run.truth.residual_opd_m
    assert abs(off) < 5.0
    assert abs(claimed) < 5.0 * state.verdict["residual_u_m"]
    assert abs(run.truth.residual_opd_m) < 200e-9
