"""Procedures as they are written: TOML files that hold the words and the order, and no code.

A step is a table with a ``kind`` and a ``title``. Kinds and their other keys:

    caution   text, include_bench     words to acknowledge by name
    confirm   text                    words to confirm
    search    -                       run the plan until the packet is bracketed
    scan      name, if_missed         one final scan and the zero in it; "search" or "reject"
    move      to                      go to the "zero", approached from the right side
    compare   scans                   judge two scans and the residual OPD against [accept]
    record    -                       measurements into the journal

A ``compare`` judges the place where the last ``move`` left the stage. So it needs a move before it
with no scan or search between, and whatever moves the stage after the last compare is refused: the
verdict would be about another place.
"""

from __future__ import annotations

import difflib
import hashlib
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from bench.errors import InputError, Problem, SpecError

__all__ = ["Procedure", "ProcedureStep", "find_procedure", "load_all", "load_procedure"]

_LARGEST_FILE = 256 * 1024
_MOST_STEPS = 64


@dataclass(frozen=True)
class ProcedureStep:
    """One step; keys that its kind does not have keep their defaults."""

    kind: str
    title: str
    text: tuple[str, ...] = ()
    include_bench: bool = False
    name: str = ""
    if_missed: str = "reject"
    to: str = ""
    scans: tuple[str, ...] = ()


@dataclass(frozen=True)
class Procedure:
    """A procedure, its steps in their order, and the hash of the file that it came from."""

    name: str
    title: str
    summary: str
    steps: tuple[ProcedureStep, ...]
    path: Path
    sha256: str
    shipped: bool


@dataclass(frozen=True)
class _Key:
    kind: type
    required: bool = False
    allowed: tuple[str, ...] = ()
    what: str = ""


_TEXT = _Key(list, required=True, what="a list of sentences")
_STEP_KEYS: dict[str, dict[str, _Key]] = {
    "caution": {"text": _TEXT, "include_bench": _Key(bool, what="true or false")},
    "confirm": {"text": _TEXT},
    "search": {},
    "scan": {
        "name": _Key(str, required=True, what="a name for the scan"),
        "if_missed": _Key(str, allowed=("search", "reject")),
    },
    "move": {"to": _Key(str, required=True, allowed=("zero",))},
    "compare": {"scans": _Key(list, required=True, what="the names of two scans")},
    "record": {},
}
_MOVING = {"search", "scan", "move"}
_COMMON: dict[str, _Key] = {
    "kind": _Key(str, required=True, allowed=tuple(_STEP_KEYS)),
    "title": _Key(str, required=True, what="a short title"),
}
_TOP: dict[str, _Key] = {
    "name": _Key(str, required=True, what="the file's own name without .toml"),
    "title": _Key(str, required=True, what="a short title"),
    "summary": _Key(str, what="a sentence or two"),
    "step": _Key(list, required=True, what="one [[step]] table or more"),
}


def _nearest(word: str, known: tuple[str, ...]) -> str:
    found = difflib.get_close_matches(word, known, n=1, cutoff=0.5)
    return found[0] if found else ""


def _is_of(value: object, kind: type) -> bool:
    return type(value) is kind  # a bool is no int here


def _check(table: Mapping[str, Any], keys: Mapping[str, _Key], path: str) -> list[Problem]:
    problems = [
        Problem(
            f"{path}{word}", repr(table[word]), "is not a known key", _nearest(word, tuple(keys))
        )
        for word in table
        if word not in keys
    ]
    for word, key in keys.items():
        if word not in table:
            if key.required:
                problems.append(Problem(f"{path}{word}", "(missing)", key.what or _one_of(key)))
            continue
        value: Any = table[word]
        if not _is_of(value, key.kind):
            problems.append(Problem(f"{path}{word}", repr(value), key.what or _one_of(key)))
        elif key.allowed and value not in key.allowed:
            near = _nearest(value, key.allowed)
            problems.append(Problem(f"{path}{word}", repr(value), _one_of(key), near))
        elif word != "step":
            problems += _check_texts(value, f"{path}{word}")
    return problems


def _check_texts(value: object, path: str) -> list[Problem]:
    """Texts that say nothing: an operator would be shown an empty line, or asked nothing."""
    if isinstance(value, str):
        return [] if value.strip() else [Problem(path, repr(value), "must not be empty")]
    if not isinstance(value, list):
        return []
    if not value:
        return [Problem(path, "[]", "must not be empty")]
    problems = []
    for i, item in enumerate(value):
        if isinstance(item, str):
            problems += _check_texts(item, f"{path}[{i}]")
        else:
            problems.append(Problem(f"{path}[{i}]", repr(item), "must be a text"))
    return problems


def _one_of(key: _Key) -> str:
    return "must be one of " + ", ".join(key.allowed) if key.allowed else "must be given"


def _check_step(table: Any, path: str) -> list[Problem]:
    if not isinstance(table, dict):
        return [Problem(path, repr(table), "must be a table")]
    kind = table.get("kind")
    own = _STEP_KEYS.get(kind, {}) if isinstance(kind, str) else {}
    keys = {**_COMMON, **own}
    if kind not in _STEP_KEYS:  # the kind is the fault; its keys cannot be judged without it
        return _check({k: v for k, v in table.items() if k in _COMMON}, _COMMON, f"{path}.")
    return _check(table, keys, f"{path}.")


def _check_order(steps: list[dict[str, Any]]) -> list[Problem]:
    """Steps that need what an earlier one gives."""
    problems: list[Problem] = []
    scans: list[str] = []
    searched = False
    left_at_zero = False  # a move to the zero, and nothing since that moves the stage on
    last_compare = max(
        (n for n, step in enumerate(steps, 1) if step["kind"] == "compare"), default=0
    )
    for number, step in enumerate(steps, 1):
        path = f"step {number}"
        kind = step["kind"]
        if kind in _MOVING and 0 < last_compare < number:
            problems.append(
                Problem(
                    f"{path}.kind",
                    repr(kind),
                    f"moves the stage away from what step {last_compare} judged; "
                    "needs a compare step after it",
                )
            )
        if kind == "search":
            searched = True
        elif kind == "scan":
            if step["name"] in scans:
                problems.append(Problem(f"{path}.name", step["name"], "is used by another scan"))
            if step.get("if_missed") == "search" and not searched:
                problems.append(
                    Problem(f"{path}.if_missed", "'search'", "needs a search step before it")
                )
            scans.append(step["name"])
        elif kind == "move" and not scans:
            problems.append(Problem(f"{path}.to", "'zero'", "needs a scan step before it"))
        elif kind == "compare":
            if not left_at_zero:
                problems.append(
                    Problem(
                        f"{path}.kind",
                        "'compare'",
                        "needs a move step before it, with no scan or search between: it judges "
                        "the place where the stage was left",
                    )
                )
            problems += _check_compared(step["scans"], scans, f"{path}.scans")
        if kind in _MOVING:
            left_at_zero = kind == "move"
    return problems


def _check_compared(named: list[str], scans: list[str], path: str) -> list[Problem]:
    """Two different scans, both made before."""
    problems = []
    if len(named) != 2 or named[0] == named[1]:
        problems.append(Problem(path, repr(named), "must name two different scans"))
    problems += [
        Problem(path, repr(name), "is no earlier scan", _nearest(name, (*scans,)))
        for name in dict.fromkeys(named)
        if name not in scans
    ]
    return problems


def load_procedure(path: Path, *, shipped: bool) -> Procedure:
    """Read and check a procedure. Raises SpecError with every problem, or InputError."""
    where = str(path)
    mend = "correct the file; DEVELOPERS.md and the shipped procedures show what a step may say"
    try:
        if path.stat().st_size > _LARGEST_FILE:
            raise InputError(
                "the procedure is too large",
                where=where,
                why=f"more than {_LARGEST_FILE // 1024} KiB",
                mend="is it the right file?",
            )
        raw = path.read_bytes()
        table = tomllib.loads(raw.decode("utf-8"))
    except OSError as error:
        raise InputError(
            "the procedure cannot be read",
            where=where,
            why=error.strerror or str(error),
            mend="give the name of a shipped procedure or the path of a TOML file",
        ) from None
    except (UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise InputError(
            "the procedure is not valid TOML", where=where, why=str(error), mend=mend
        ) from None
    problems = _check(table, _TOP, "")
    steps = table.get("step")
    if isinstance(steps, list):
        for number, step in enumerate(steps, 1):
            problems += _check_step(step, f"step {number}")
        if not steps:
            problems.append(Problem("step", "[]", "one [[step]] table or more"))
        if len(steps) > _MOST_STEPS:
            problems.append(Problem("step", f"{len(steps)} steps", f"at most {_MOST_STEPS}"))
        if not problems:
            problems += _check_order(steps)
    if not problems and table["name"] != path.stem:
        problems.append(
            Problem("name", repr(table["name"]), f"must be the file's own, {path.stem}")
        )
    if problems:
        raise SpecError(
            "the procedure cannot be used", where=where, problems=tuple(problems), mend=mend
        )
    return Procedure(
        name=table["name"],
        title=table["title"],
        summary=" ".join(table.get("summary", "").split()),
        steps=tuple(_step(step) for step in table["step"]),
        path=path,
        sha256=hashlib.sha256(raw).hexdigest(),
        shipped=shipped,
    )


def _step(table: Mapping[str, Any]) -> ProcedureStep:
    values: dict[str, Any] = {
        key: tuple(value) if isinstance(value, list) else value for key, value in table.items()
    }
    return ProcedureStep(**values)


# --- where procedures live -----------------------------------------------------------------------


def shipped_folder() -> Path:
    """The shipped procedures: inside an installed package, or beside it in a checkout."""
    package = Path(__file__).resolve().parent.parent
    inside = package / "shipped" / "procedures"
    return inside if inside.is_dir() else package.parent / "procedures"


def _files(bench_folder: Path | None) -> dict[str, list[tuple[Path, bool]]]:
    found: dict[str, list[tuple[Path, bool]]] = {}
    folders = [(shipped_folder(), True)]
    if bench_folder is not None:
        folders.append((bench_folder / "procedures", False))
    seen: set[Path] = set()
    for folder, shipped in folders:
        if not folder.is_dir() or folder.resolve() in seen:
            continue
        seen.add(folder.resolve())
        for path in sorted(folder.glob("*.toml")):
            found.setdefault(path.stem, []).append((path, shipped))
    return found


def load_all(bench_folder: Path | None) -> list[Procedure]:
    """Every procedure that a run could name. Raises SpecError or InputError for a bad one.

    A lab's own file with the name of a shipped one is an error: nothing is overridden silently.
    """
    return [find_procedure(name, bench_folder) for name in sorted(_files(bench_folder))]


def find_procedure(name: str, bench_folder: Path | None) -> Procedure:
    """The procedure called ``name``, or at the path ``name``. Raises InputError or SpecError."""
    if name.endswith(".toml") or "/" in name:
        return load_procedure(Path(name), shipped=False)
    files = _files(bench_folder)
    if name not in files:
        near = _nearest(name, tuple(files))
        raise InputError(
            f"there is no procedure called {name!r}",
            where=str((bench_folder or Path()) / "procedures"),
            why="known are " + ", ".join(sorted(files)),
            mend=f"did you mean {near!r}?" if near else "give one of these names",
        )
    if len(files[name]) > 1:
        raise InputError(
            f"two procedures are called {name!r}",
            where=str(files[name][1][0]),
            why="one of them is shipped, and a lab's own must not stand in for it silently",
            mend="give your own another name",
        )
    path, shipped = files[name][0]
    return load_procedure(path, shipped=shipped)
