"""What a run delivers: the contract's quantities, and the measurements that go into the record."""

from __future__ import annotations

import math
from typing import Any

from .state import Event, RunState, Setup

__all__ = ["measurements", "result_quantities"]


def result_quantities(setup: Setup, state: RunState) -> dict[str, Any]:
    """The contract's quantities of a run's result, as far as they are known."""
    result: dict[str, Any] = {}
    if state.verdict is not None:
        zero_m, u_m = float(state.verdict["zero_m"]), float(state.verdict["zero_u_m"])
        result["residual_opd"] = _quantity(
            state.verdict["residual_opd_m"] * 1e9, "nm", state.verdict["residual_u_m"] * 1e9
        )
    elif state.zeros:
        newest = state.zeros[-1]
        zero_m, u_m = newest.zero_m, newest.u_m
    else:
        zero_m = u_m = math.nan
    if math.isfinite(zero_m):
        result["zero"] = _quantity(zero_m * 1e6, "um", u_m * 1e6)
    if state.findings is not None and "at_wavelength" in state.findings:
        result["at_wavelength"] = state.findings["at_wavelength"]
    left_at_m = state.left_at_m
    if left_at_m is None and state.position_known and state.at_rest and state.pending is None:
        left_at_m = state.position_m
    if left_at_m is not None:
        result["stage_left_at"] = _quantity(
            left_at_m * 1e6, "um", setup.facts.resolution_m / math.sqrt(12.0) * 1e6
        )
    result["bench_time"] = _quantity(state.time_s - state.began_s, "s")
    return result


def _quantity(value: float, unit: str, uncertainty: float | None = None) -> dict[str, Any]:
    document: dict[str, Any] = {"value": value, "unit": unit}
    if uncertainty is not None:
        document["standard_uncertainty"] = uncertainty
    return document


def measurements(setup: Setup, state: RunState) -> tuple[Event, ...]:
    """The measurements of a run, one event each, numbered within the run."""
    rows: list[tuple[str, dict[str, Any]]] = []
    result = result_quantities(setup, state)
    rows += [(name, result[name]) for name in ("zero", "residual_opd") if name in result]
    if state.verdict is not None:
        rows.append(
            ("scans_differ_opd", _quantity(state.verdict["scans_differ_opd_m"] * 1e9, "nm"))
        )
    for name in ("contrast", "amplitude", "mean_wavelength"):
        if state.findings is not None and name in state.findings:
            rows.append((name, dict(state.findings[name])))
    shared = {
        "at_wavelength": result.get("at_wavelength"),
        "scans": [zero.scan for zero in state.zeros],
        "source": state.source,
        "by": setup.by,
    }
    return tuple(
        Event(
            "measurement",
            {"id": f"{setup.run}-{number}", "name": name, **quantity, **shared},
        )
        for number, (name, quantity) in enumerate(rows, 1)
    )
