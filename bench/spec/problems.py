"""Faults of a file, gathered while it is checked: each with its path, value and nearest key."""

from __future__ import annotations

import difflib
import re
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Annotated, Any, TypeVar, cast

from bench.errors import Problem

if TYPE_CHECKING:
    from bench.spec.schema import Table

T = TypeVar("T", bound="Table")

__all__ = ["Problems", "nearest", "row_paths", "written"]


def nearest(word: str, known: Iterable[str]) -> str:
    """The known word most like ``word``, or ``""``."""
    folded = {name.casefold(): name for name in known}
    near = difflib.get_close_matches(word.casefold(), folded, 1, 0.55)
    return folded[near[0]] if near else ""


def row_paths(name: str, rows: object) -> list[str]:
    """How messages call the tables of an array: ``source "white"``, or ``source 2`` of several.

    A number, from 1, where there is no name of its own or the name is too long to be read.
    """
    tables = rows if isinstance(rows, list) else []
    names = [row.get("name") if isinstance(row, dict) else None for row in tables]
    return [
        f'{name} "{given}"'
        if isinstance(given, str) and 0 < len(given) <= 40 and names.count(given) == 1
        else f"{name} {number}"
        for number, given in enumerate(names, 1)
    ]


def written(value: object) -> str:
    """A value of a TOML file as the file writes it, near enough to be recognised."""
    if isinstance(value, str):
        return f'"{value}"'
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, list):
        return f"[{', '.join(written(item) for item in value[:4])}]"
    if isinstance(value, Mapping):
        rows = [f"{key} = {written(item)}" for key, item in list(value.items())[:4]]
        return f"{{ {', '.join(rows)} }}"
    return str(value)


@dataclass
class Problems:
    """The list, with the ways in which problems come about."""

    found: list[Problem] = field(default_factory=list)

    def add(self, path: str, value: object, allowed: str, near: str = "") -> None:
        self.found.append(Problem(path, written(value), allowed, near))

    def missing(self, path: str, allowed: str) -> None:
        text = f"required: {allowed}" if allowed else "required"
        self.found.append(Problem(path, "(missing)", text))

    def unknown_key(self, path: str, value: object, key: str, known: Iterable[str]) -> None:
        known = list(known)
        near = nearest(key, known)
        elsewhere = _tables_with(key)
        if elsewhere:
            self.add(path, value, f"no such key here; it belongs into {' or '.join(elsewhere)}")
            return
        allowed = "no such key" if near or not known else f"no such key; known: {', '.join(known)}"
        self.add(path, value, allowed, near)

    def about(self, *paths: str) -> bool:
        """Whether something is wrong already at one of these paths, or below it."""
        return any(
            problem.path == path or problem.path.startswith((f"{path}.", f"{path}["))
            for problem in self.found
            for path in paths
        )

    def table(self, model: type[T], raw: object, path: str) -> T | None:
        """``raw`` as a table of that kind; None where it is no table at all.

        Keys that are missing or wrong become problems and stand as None, so that what does not
        depend on them is checked all the same.
        """
        from pydantic import ValidationError

        if not isinstance(raw, dict):
            self.add(path, raw, f"must be a table [{path}]")
            return None
        try:
            return model.model_validate(raw)
        except ValidationError as error:
            wrong = error.errors(include_url=False)
            for row in wrong:
                self._pydantic(model, path, dict(row))
            return _part(model, raw, {row["loc"][0] for row in wrong if row["loc"]})

    def _pydantic(self, model: type[Table], path: str, row: dict[str, Any]) -> None:
        location = [part for part in row["loc"] if not _of_a_union(part)]
        full = path
        fields = model.model_fields
        description = ""
        for depth, part in enumerate(location):
            full += f"[{part}]" if isinstance(part, int) else f".{part}"
            if isinstance(part, str) and part in fields:
                description = fields[part].description or ""
                inner = _table_of(fields[part].annotation)
                if inner is not None and depth + 1 < len(location):
                    fields = inner.model_fields
        key = str(location[-1]) if location else ""
        kind = row["type"]
        if kind == "extra_forbidden":
            self.unknown_key(full, row["input"], key, fields)
        elif kind == "missing":
            self.missing(full, description)
        elif kind == "evenarm":
            self.add(full, row["input"], row["msg"] + _how(row.get("ctx", {}), description))
        elif kind == "literal_error":
            choices = re.findall(r'"([^"]+)"', description) or re.findall(r"\w+", description)
            if not isinstance(row["input"], str) and str(row["input"]) in choices:
                allowed = f'must be text in quotes, {key} = "{row["input"]}"; {description}'
                self.add(full, row["input"], allowed)
                return
            near = nearest(str(row["input"]), choices)
            self.add(full, row["input"], f"must be {description}", near)
        else:
            self.add(full, row["input"], f"{_plain(row)}; {description}".rstrip("; "))


def _part(model: type[T], raw: dict[str, Any], wrong: set[Any]) -> T:
    """A table of the keys that are right; None for the others."""
    from pydantic import TypeAdapter

    values: dict[str, Any] = {}
    for key, known in model.model_fields.items():
        if key in wrong or (key not in raw and known.is_required()):
            values[key] = None
        elif key in raw:
            kind: Any = Annotated[known.annotation, None, *known.metadata]
            values[key] = TypeAdapter(kind).validate_python(raw[key])
    return cast(T, model.model_construct(**values))


def _how(context: dict[str, Any], description: str) -> str:
    """How to write it: with the key's own example where its description has one."""
    mend = str(context.get("mend", ""))
    example = re.search(r'such as (\[[^\]]*\]|"[^"]*")', description)
    if mend and example and ' "' in mend:
        mend = mend[: mend.index(' "')] + f" {example[1]}"
    return f" - {mend}" if mend else ""


def _plain(row: dict[str, Any]) -> str:
    """pydantic's message without its terms for types."""
    if row["type"] == "finite_number":
        return "must be a finite number"
    if row["type"] == "string_pattern_mismatch":
        return "must be text without control characters"
    if row["type"] == "tuple_type":
        return "must be a pair in square brackets"
    return (
        str(row["msg"])
        .replace("Input should be", "must be")
        .replace("String", "text")
        .replace("a valid string", "text")
    )


def _of_a_union(part: object) -> bool:
    """Parts of a location that name a branch of a union rather than a key."""
    return isinstance(part, str) and ("[" in part or part in {"float", "str", "int", "bool"})


def _tables_with(key: str) -> list[str]:
    """Tables of bench.toml that have such a key, where it is not one that many have."""
    from bench.spec.schema import TABLES

    names = [name for name, table in TABLES.items() if key in table.model_fields]
    return [f"[{name}]" for name in names] if len(names) <= 2 else []


def _table_of(annotation: object) -> type[Table] | None:
    from bench.spec.schema import Table

    for candidate in (annotation, *getattr(annotation, "__args__", ())):
        if isinstance(candidate, type) and issubclass(candidate, Table):
            return candidate
    return None
