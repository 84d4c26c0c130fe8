"""How commands speak: text for people, JSON for programs, and one place where errors end."""

from __future__ import annotations

import contextlib
import json
import math
import sys
from collections.abc import Mapping
from typing import Any

from bench.errors import EvenarmError

EXIT_DONE = 0
EXIT_NEGATIVE = 1
EXIT_INPUT = 2
EXIT_DEVICE = 3
EXIT_STOPPED = 130


def _finite(value: Any) -> Any:
    """JSON has no NaN or infinity; what is not finite is left out as null."""
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, Mapping):
        return {key: _finite(item) for key, item in value.items()}
    if isinstance(value, (list, tuple)):
        return [_finite(item) for item in value]
    return value


def emit_json(document: Mapping[str, Any]) -> None:
    """One JSON document on one line of standard output."""
    sys.stdout.write(json.dumps(_finite(document), ensure_ascii=True, allow_nan=False) + "\n")
    sys.stdout.flush()


def note(text: str) -> None:
    """Progress and warnings: standard error, so that standard output stays clean.

    A standard error that nobody reads any more is no reason to end anything.
    """
    with contextlib.suppress(OSError, ValueError):
        sys.stderr.write(text + "\n")
        sys.stderr.flush()


def quantity(value: float, unit: str, uncertainty: float | None = None) -> dict[str, Any]:
    """A quantity of the contract; the uncertainty is absent where none is known."""
    document: dict[str, Any] = {"value": float(value), "unit": unit}
    if uncertainty is not None and math.isfinite(uncertainty):
        document["standard_uncertainty"] = float(uncertainty)
    return document


def report_error(error: EvenarmError, *, as_json: bool) -> int:
    """Say what went wrong, once, and give the exit status."""
    note("\n".join(error.lines()))
    if as_json:
        emit_json(
            {
                "schema": "evenarm.error/1",
                "what": error.what,
                "where": error.where,
                "why": error.why,
                "mend": error.mend,
                "problems": [problem.line() for problem in getattr(error, "problems", ())],
            }
        )
    return error.exit_status
