"""Tables whose keys a driver declares: [stage.settings] and the like, and world.toml.

A declaration is duck-typed (``drivers.contracts.Setting``), because this room does not import
drivers. A dotted name is a key of a nested table, ``source[].level`` a key of each table of an
array. Values arrive in the unit declared, as plain numbers; with ``random``,
``{ uniform = [a, b] }`` arrives as the pair.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from typing import Any, Protocol

from bench.errors import QuantityError
from bench.quantities import parse_in
from bench.spec.problems import Problems, nearest, row_paths

__all__ = ["Declared", "Setting", "check_table"]


class Setting(Protocol):
    """What is read of a declaration; see ``drivers.contracts.Setting`` for the meaning."""

    @property
    def name(self) -> str: ...
    @property
    def unit(self) -> str: ...
    @property
    def doc(self) -> str: ...
    @property
    def default(self) -> float | int | str | bool | None: ...
    @property
    def required(self) -> bool: ...
    @property
    def low(self) -> float | None: ...
    @property
    def high(self) -> float | None: ...
    @property
    def choices(self) -> tuple[str, ...]: ...
    @property
    def random(self) -> bool: ...


class Declared(Protocol):
    """What is read of a driver."""

    @property
    def name(self) -> str: ...
    @property
    def simulated(self) -> bool: ...
    @property
    def settings(self) -> tuple[Setting, ...]: ...
    @property
    def world(self) -> tuple[Setting, ...]: ...


def check_table(
    raw: Mapping[str, Any],
    settings: Iterable[Setting],
    *,
    path: str,
    signal_unit: str,
    problems: Problems,
) -> dict[str, Any]:
    """Values by dotted name, with every default filled in; an array is a list under its own name.

    ``path`` begins the path of every problem. ``signal_unit`` is what "signal" means.
    """
    known: dict[str, Setting] = {}
    for setting in settings:
        known.setdefault(setting.name, setting)
    arrays = {name.partition("[].")[0] for name in known if "[]." in name}
    single = {name: setting for name, setting in known.items() if "[]." not in name}
    rest = {key: value for key, value in raw.items() if key not in arrays}
    values = _flat(rest, single, path, signal_unit, problems, arrays)
    for array in sorted(arrays):
        prefix = f"{array}[]."
        inner = {
            name.removeprefix(prefix): row for name, row in known.items() if name.startswith(prefix)
        }
        values[array] = _array(raw.get(array, []), inner, f"{path}{array}", signal_unit, problems)
    return values


def _array(
    raw: object, inner: Mapping[str, Setting], path: str, signal_unit: str, problems: Problems
) -> list[dict[str, Any]]:
    if not isinstance(raw, list) or not all(isinstance(item, dict) for item in raw):
        problems.add(path, raw, f"must be tables [[{path.rpartition(' ')[2]}]]")
        return []
    return [
        _flat(item, inner, f"{row}.", signal_unit, problems, set())
        for row, item in zip(row_paths(path, raw), raw, strict=True)
    ]


def _flat(
    raw: Mapping[str, Any],
    known: Mapping[str, Setting],
    path: str,
    signal_unit: str,
    problems: Problems,
    arrays: set[str],
) -> dict[str, Any]:
    given: dict[str, Any] = {}
    broken: list[str] = []
    branches = {
        ".".join(name.split(".")[:depth])
        for name in known
        for depth in range(1, name.count(".") + 1)
    }

    def walk(table: Mapping[str, Any], prefix: str) -> None:
        for key, value in table.items():
            name = prefix + key
            if name in known:
                given[name] = value
            elif name in branches:
                if isinstance(value, dict):
                    walk(value, f"{name}.")
                else:
                    broken.append(f"{name}.")
                    problems.add(path + name, value, "must be a table")
            else:
                here = [row.removeprefix(prefix) for row in known if row.startswith(prefix)]
                heads = list(dict.fromkeys([row.partition(".")[0] for row in here] + [*arrays]))
                near = nearest(key, heads)
                # The key may be right and the table wrong.
                near = near or next((n for n in known if n.rpartition(".")[2] == key), "")
                allowed = "no such key" if near else f"no such key; known: {', '.join(heads)}"
                problems.add(path + name, value, allowed, near)

    walk(raw, "")
    values: dict[str, Any] = {}
    for name, setting in known.items():
        if name in given:
            value = _value(given[name], setting, path + name, signal_unit, problems)
            if value is not None:
                values[name] = value
        elif setting.required and not name.startswith(tuple(broken)):
            problems.missing(path + name, setting.doc)
        elif setting.default is not None:
            values[name] = setting.default
    return values


def _value(raw: Any, setting: Setting, path: str, signal_unit: str, problems: Problems) -> Any:
    """One value in the unit declared; None, and a problem added, where it cannot be used."""
    if setting.unit == "text":
        return _text(raw, setting, path, problems)
    if setting.unit == "bool":
        if isinstance(raw, bool):
            return raw
        problems.add(path, raw, f"must be true or false; {setting.doc}")
        return None
    if isinstance(raw, dict):
        return _random(raw, setting, path, signal_unit, problems)
    return _number(raw, setting, path, signal_unit, problems)


def _text(raw: Any, setting: Setting, path: str, problems: Problems) -> str | None:
    if not isinstance(raw, str):
        problems.add(path, raw, f"must be text; {setting.doc}")
    elif setting.choices and raw not in setting.choices:
        allowed = f"must be one of: {', '.join(setting.choices)}"
        problems.add(path, raw, allowed, nearest(raw, setting.choices))
    else:
        return raw
    return None


def _random(
    raw: dict[str, Any], setting: Setting, path: str, signal_unit: str, problems: Problems
) -> tuple[float, float] | None:
    pair = raw.get("uniform")
    if not setting.random:
        problems.add(path, raw, f"must be one value, not drawn at random; {setting.doc}")
        return None
    if list(raw) != ["uniform"] or not isinstance(pair, list) or len(pair) != 2:
        problems.add(path, raw, "must be a value or { uniform = [lower, upper] }")
        return None
    low, high = (_number(item, setting, path, signal_unit, problems) for item in pair)
    if low is None or high is None:
        return None
    if not low <= high:
        problems.add(path, raw, "the lower end of uniform comes first")
        return None
    return (low, high)


def _number(
    raw: Any, setting: Setting, path: str, signal_unit: str, problems: Problems
) -> float | int | None:
    unit = signal_unit if setting.unit == "signal" else setting.unit
    number: float | int
    if unit in {"", "int"}:
        wanted = int if unit == "int" else (int, float)
        if isinstance(raw, bool) or not isinstance(raw, wanted) or not math.isfinite(raw):
            kind = "a whole number" if unit == "int" else "a finite number without a unit"
            problems.add(path, raw, f"must be {kind}; {setting.doc}")
            return None
        number = raw if unit == "int" else float(raw)
    else:
        try:
            number = parse_in(raw, unit).value
        except QuantityError as error:
            parts = [error.what, error.why and f"({error.why})", error.mend and f"- {error.mend}"]
            problems.add(path, raw, " ".join(part for part in parts if part))
            return None
    low = -math.inf if setting.low is None else setting.low
    high = math.inf if setting.high is None else setting.high
    if not low <= number <= high:
        shown = "" if unit == "int" else f" {unit}".rstrip()
        if math.isinf(high):
            limits = f"{low:g}{shown} or more"
        elif math.isinf(low):
            limits = f"{high:g}{shown} or less"
        else:
            limits = f"from {low:g} to {high:g}{shown}"
        problems.add(path, raw, f"must be {limits}; {setting.doc}")
        return None
    return number
