"""What can be plugged in: entry points, listed without importing any of them.

A plug-in is an installed package with an entry point in one of the groups below, whose object is a
``drivers.contracts.Driver``. One that cannot be imported is named and the others still work.
"""

from __future__ import annotations

import importlib
from dataclasses import dataclass
from functools import cache

from drivers.contracts import KINDS, Driver, Kind

__all__ = ["GROUPS", "Available", "LoadFailure", "available", "declared", "load", "names"]

GROUPS: dict[Kind, str] = {
    "stage": "evenarm.stages",
    "detector": "evenarm.detectors",
    "camera": "evenarm.cameras",
    "changer": "evenarm.changers",
    "climate": "evenarm.climates",
}

# Shipped with the program, so that a checkout that is not installed has a bench too.
BUILT_IN: tuple[tuple[Kind, str, str], ...] = (
    ("stage", "simulated", "drivers.simulated.plugin:STAGE"),
    ("detector", "simulated", "drivers.simulated.plugin:DETECTOR"),
    ("changer", "simulated", "drivers.simulated.plugin:CHANGER"),
    ("climate", "simulated", "drivers.simulated.plugin:CLIMATE"),
)


@dataclass(frozen=True)
class Available:
    """A driver that is there by name. ``target`` is ``module:object``; ``source`` who brings it."""

    kind: Kind
    name: str
    target: str
    source: str


class LoadFailure(ImportError):
    """A plug-in that is listed but cannot be used: ``plugin`` says which, ``why`` what happened."""

    def __init__(self, plugin: Available, why: str) -> None:
        super().__init__(
            f"the {plugin.kind} driver {plugin.name!r} ({plugin.target}, from {plugin.source}) "
            f"cannot be used: {why}"
        )
        self.plugin = plugin
        self.why = why


@cache
def available() -> tuple[Available, ...]:
    """Every driver by kind and name, nothing imported.

    Where two packages claim one name, each is listed and ``load`` refuses the name, because which
    of the two would move a stage must not depend on the order of installation.
    """
    from importlib.metadata import entry_points

    found = dict.fromkeys(BUILT_IN, "evenarm")
    for kind, group in GROUPS.items():
        for point in entry_points(group=group):
            source = point.dist.name if point.dist is not None else "an unnamed package"
            found.setdefault((kind, point.name, point.value.replace(" ", "")), source)
    rows = [Available(kind, name, target, source) for (kind, name, target), source in found.items()]
    return tuple(sorted(rows, key=lambda row: (KINDS.index(row.kind), row.name, row.target)))


def names(kind: str) -> tuple[str, ...]:
    """The names known for one kind of device."""
    return tuple(dict.fromkeys(row.name for row in available() if row.kind == kind))


def load(kind: str, name: str) -> Driver:
    """Import one driver. Raises LookupError where there is none, LoadFailure where it is broken."""
    rows = [row for row in available() if row.kind == kind and row.name == name]
    if not rows:
        raise LookupError(f"no {kind} driver {name!r}; known: {', '.join(names(kind)) or 'none'}")
    if len(rows) > 1:
        raise LoadFailure(rows[0], f"{rows[1].source} claims the same name; uninstall one of them")
    return _import(rows[0])


def declared(kind: str, name: str) -> Driver | None:
    """As ``load``, but None where there is no driver of that name. Raises LoadFailure."""
    return load(kind, name) if name in names(kind) else None


def _import(row: Available) -> Driver:
    module_name, _, attribute = row.target.partition(":")
    try:
        found: object = importlib.import_module(module_name)
        for part in attribute.split(".") if attribute else ():
            found = getattr(found, part)
    except (Exception, SystemExit) as error:  # an import may raise anything
        raise LoadFailure(row, f"{type(error).__name__}: {error}") from error
    if not isinstance(found, Driver):
        raise LoadFailure(row, f"the object is of type {type(found).__name__}, not a Driver")
    if (found.kind, found.name) != (row.kind, row.name):
        raise LoadFailure(row, f"it declares itself as {found.kind} {found.name!r}")
    return found
