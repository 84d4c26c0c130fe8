"""Every error that Evenarm raises on purpose, in one tree.

    EvenarmError                     what, where, why, how to mend; carries the exit status
    ├── InputError                   2  something that a person wrote cannot be used
    │   ├── QuantityError            2  text that is not a quantity of the kind asked for
    │   ├── SpecError                2  bench.toml or a procedure; holds every problem of the file
    │   ├── ScanFileError            2  a recorded scan that holds nothing usable
    │   └── UsageError               2  a command line that asks for what cannot be
    ├── MotionRefused                3  the guard did not let a command through
    ├── BenchFault                   3  a device failed while the run needed it
    └── JournalError                 3  the journal cannot be used for what was asked
        ├── JournalHeld              3  another process writes to it
        └── JournalDamaged           1  the chain does not verify

Errors of the devices themselves have a tree of their own in ``drivers.contracts``, because drivers
know nothing of this package; the conductor turns them into ``BenchFault``.
"""

from __future__ import annotations

import unicodedata
from dataclasses import dataclass

__all__ = [
    "BenchFault",
    "EvenarmError",
    "InputError",
    "JournalDamaged",
    "JournalError",
    "JournalHeld",
    "MotionRefused",
    "Problem",
    "QuantityError",
    "ScanFileError",
    "SpecError",
    "UsageError",
    "printable",
]


# What of a terminal of 80 columns and 24 lines is left for the problems of a file.
_SCREEN_COLUMNS, _SCREEN_ROWS, _MOST_PROBLEMS = 80, 18, 16


def printable(text: object, limit: int = 300) -> str:
    """``text`` without control characters or bidirectional marks, and of bounded length.

    Everything that comes from a file, an instrument or an operator passes through here before it
    reaches a terminal: an escape sequence in a serial number must not move the cursor.
    """
    raw = str(text)
    kept = "".join(
        " " if ch in "\t\n\r" else ch
        for ch in raw[: limit * 4]
        if ch in "\t\n\r" or unicodedata.category(ch) not in {"Cc", "Cf", "Cs", "Co", "Cn"}
    )
    return kept if len(kept) <= limit else kept[: limit - 1] + "…"


class EvenarmError(Exception):
    """An error that a person can act on.

    Parameters are short sentences without a final full stop: ``what`` went wrong, ``where`` (file,
    key, device), ``why`` (the value seen and the limit), ``mend`` (what to do next).
    """

    exit_status = 2

    def __init__(self, what: str, *, where: str = "", why: str = "", mend: str = "") -> None:
        self.what = printable(what)
        self.where = printable(where)
        self.why = printable(why, 600)
        self.mend = printable(mend, 600)
        super().__init__(self.what)

    def lines(self) -> list[str]:
        """The message as lines of plain text, the most important first."""
        rows = [self.what]
        rows += [
            f"  {label}: {text}"
            for label, text in (("where", self.where), ("why", self.why), ("mend", self.mend))
            if text
        ]
        return rows

    def __str__(self) -> str:
        return "\n".join(self.lines())


class InputError(EvenarmError):
    """Something that a person wrote cannot be used."""


class QuantityError(InputError):
    """Text that is not a quantity of the kind asked for."""


class ScanFileError(InputError):
    """A recorded scan that holds nothing usable."""


class UsageError(InputError):
    """A command line that asks for what cannot be."""


@dataclass(frozen=True)
class Problem:
    """One fault found in a file: where it stands, what stands there, what may stand there."""

    path: str
    value: str
    allowed: str
    nearest: str = ""
    at_line: int | None = None

    def line(self) -> str:
        at = "" if self.at_line is None else f"line {self.at_line}: "
        text = (
            f"{at}{printable(self.path)} = {printable(self.value, 80)}: {printable(self.allowed)}"
        )
        return f"{text} (did you mean {printable(self.nearest, 60)!r}?)" if self.nearest else text


class SpecError(InputError):
    """A bench description or a procedure that cannot be used; every problem of the file at once."""

    def __init__(self, what: str, *, where: str, problems: tuple[Problem, ...], mend: str) -> None:
        super().__init__(what, where=where, mend=mend)
        self.problems = problems

    def lines(self) -> list[str]:
        """As much as fits one screen of 24 lines; ``problems`` holds all of them."""
        shown: list[str] = []
        rows = 0
        for problem in self.problems:
            row = f"  - {problem.line()}"
            rows += -(-len(row) // _SCREEN_COLUMNS)
            if shown and (rows > _SCREEN_ROWS or len(shown) == _MOST_PROBLEMS):
                more = len(self.problems) - len(shown)
                shown.append(f"  - and {more} more; `evenarm check --json` names them all")
                break
            shown.append(row)
        return [self.what, f"  where: {self.where}", *shown, f"  mend: {self.mend}"]


class MotionRefused(EvenarmError):
    """The guard did not let a command through to the stage."""

    exit_status = 3


class BenchFault(EvenarmError):
    """A device failed while the run needed it."""

    exit_status = 3


class JournalError(EvenarmError):
    """The journal cannot be used for what was asked."""

    exit_status = 3


class JournalHeld(JournalError):
    """Another process writes to this journal."""


class JournalDamaged(JournalError):
    """The chain of the journal does not verify."""

    exit_status = 1
