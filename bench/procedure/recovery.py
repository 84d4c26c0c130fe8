"""What an earlier run left behind: runs that never ended, and moves whose end nobody saw."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

from bench.journal import Entry

__all__ = ["LeftOpen", "left_open"]

_INTENTS = frozenset({"move-intended", "scan-intended", "home-intended"})
_OUTCOMES = frozenset({"move-done", "scan-done", "home-done", "move-failed", "stopped"})
KINDS = (*sorted(_INTENTS), *sorted(_OUTCOMES), "run-started", "run-ended")


@dataclass(frozen=True)
class LeftOpen:
    """``runs`` without an end, oldest first; ``why`` is empty where the position can be trusted."""

    runs: tuple[str, ...]
    why: str


def left_open(entries: Iterable[Entry]) -> LeftOpen:
    """Fold the journal's motion entries (of the kinds in ``KINDS``).

    The position is not to be trusted where the newest motion was intended and its outcome is not in
    the journal, or where its outcome was that the position is not known.
    """
    runs: dict[str, None] = {}
    why = ""
    for entry in entries:
        if entry.kind == "run-started" and entry.run is not None:
            runs[entry.run] = None
        elif entry.kind == "run-ended" and entry.run is not None:
            runs.pop(entry.run, None)
        elif entry.kind in _INTENTS:
            why = (
                f"Run {entry.run} began to move the stage (entry {entry.seq}, {entry.time_utc}) "
                "and the journal does not say where that ended."
            )
        elif entry.kind in _OUTCOMES:
            known = entry.body.get("position_known", True)
            why = "" if known else f"Run {entry.run} ended with the stage position not known."
    return LeftOpen(tuple(runs), why)
