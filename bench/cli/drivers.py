"""``evenarm drivers``: what can be plugged in."""

from __future__ import annotations

from typing import TYPE_CHECKING, Annotated, Any

import typer

from bench.cli.output import EXIT_DONE, EXIT_NEGATIVE, emit_json, note, report_error
from bench.errors import UsageError, printable

if TYPE_CHECKING:
    from drivers.contracts import Driver, Setting
    from drivers.registry import Available, LoadFailure

__all__ = ["command"]


def command(
    settings: Annotated[
        str | None,
        typer.Option(
            "--settings", metavar="NAME", help="What the drivers of that name understand."
        ),
    ] = None,
    faults: Annotated[
        bool, typer.Option("--faults", help="What a simulated bench can suffer.")
    ] = False,
    load: Annotated[
        bool, typer.Option("--load", help="Import each driver and say which cannot be used.")
    ] = False,
    as_json: Annotated[bool, typer.Option("--json", help="One JSON document.")] = False,
) -> None:
    """List what can be plugged in. Without options nothing is imported."""
    from drivers import registry

    rows = [row for row in registry.available() if settings in (None, row.name)]
    if not rows:
        from bench.spec.problems import nearest

        names = sorted({row.name for row in registry.available()})
        near = nearest(str(settings), names)
        error = UsageError(
            f"there is no driver {printable(settings)!r}",
            where="--settings",
            mend=f"did you mean {near!r}?" if near else f"there are: {', '.join(names)}",
        )
        raise typer.Exit(report_error(error, as_json=as_json))
    loaded: dict[Available, Driver] = {}
    failed: list[LoadFailure] = []
    if settings is not None or faults or load:
        for row in rows:
            try:
                loaded[row] = registry.load(row.kind, row.name)
            except registry.LoadFailure as broken:
                failed.append(broken)
    kinds = _faults(loaded.values()) if faults else []
    if as_json:
        document: dict[str, Any] = {
            "schema": "evenarm.drivers/1",
            "drivers": [_document(row, loaded.get(row), settings is not None) for row in rows],
            "failed": [_failed(failure) for failure in failed],
        }
        if faults:
            document["faults"] = kinds
        emit_json(document)
    elif faults:
        _show_faults(kinds)
    else:
        _show(rows, loaded, with_settings=settings is not None)
    for failure in failed:
        note(printable(failure, 600))
    raise typer.Exit(EXIT_NEGATIVE if failed else EXIT_DONE)


def _document(row: Available, driver: Driver | None, with_settings: bool) -> dict[str, Any]:
    document: dict[str, Any] = {
        "kind": row.kind,
        "name": row.name,
        "target": row.target,
        "from": row.source,
    }
    if driver is not None:
        document |= {"summary": driver.summary, "simulated": driver.simulated}
        document["capabilities"] = sorted(driver.capabilities)
        if with_settings:
            document["settings"] = [_setting(setting) for setting in driver.settings]
            document["world"] = [_setting(setting) for setting in driver.world]
    return document


def _setting(setting: Setting) -> dict[str, Any]:
    return {
        "name": setting.name,
        "unit": setting.unit,
        "doc": setting.doc,
        "default": setting.default,
        "required": setting.required,
        "low": setting.low,
        "high": setting.high,
        "choices": list(setting.choices),
        "random": setting.random,
    }


def _failed(failure: LoadFailure) -> dict[str, str]:
    plugin = failure.plugin
    return {
        "kind": plugin.kind,
        "name": plugin.name,
        "target": plugin.target,
        "from": plugin.source,
        "why": printable(failure.why),
    }


def _faults(drivers: Any) -> list[dict[str, Any]]:
    """Every kind of fault that a simulated driver declares, once, with what it is and its keys."""
    found: dict[str, dict[str, Any]] = {}
    for driver in drivers:
        kinds = [s for s in driver.world if s.name == "fault[].kind"]
        keys = [s for s in driver.world if s.name.startswith("fault[].") and s not in kinds]
        for kind in (kind for setting in kinds for kind in setting.choices):
            entry = found.setdefault(kind, {"kind": kind, "doc": "", "drivers": [], "keys": []})
            entry["doc"] = entry["doc"] or driver.faults.get(kind, "")
            entry["drivers"].append(f"{driver.kind} {driver.name}")
            entry["keys"] = [
                _setting(key) | {"name": key.name.removeprefix("fault[].")} for key in keys
            ]
    return list(found.values())


def _show(rows: list[Available], loaded: dict[Available, Driver], *, with_settings: bool) -> None:
    width = max(len(row.name) for row in rows)
    for row in rows:
        driver = loaded.get(row)
        told = f"  {driver.summary}" if driver is not None else ""
        simulated = " (simulated)" if driver is not None and driver.simulated else ""
        source = f"  from {row.source}: {row.target}" if driver is None else ""
        line = f"{row.kind:<9} {row.name:<{width}}{source}{told}{simulated}"
        typer.echo(printable(line))
        if with_settings and driver is not None:
            _show_settings(f"in [{row.kind}.settings]", driver.settings)
    worlds = {driver.world: None for driver in loaded.values() if driver.world}
    if with_settings:
        for world in worlds:
            _show_settings("in world.toml", world)


def _show_settings(title: str, settings: tuple[Setting, ...]) -> None:
    if not settings:
        typer.echo(f"  {title}: no keys of its own")
        return
    typer.echo(f"  {title}:")
    width = max(len(setting.name) for setting in settings)
    for setting in settings:
        if setting.required:
            state = "required"
        elif setting.default is None:
            state = "optional"
        else:
            unit = setting.unit if setting.unit not in {"text", "bool", "int", "signal"} else ""
            state = f"default {setting.default} {unit}".rstrip()
        kind = {"": "number", "int": "whole number", "bool": "true/false"}.get(
            setting.unit, setting.unit
        )
        choices = f"; one of {', '.join(setting.choices)}" if setting.choices else ""
        typer.echo(
            printable(f"    {setting.name:<{width}}  {kind:<12} {state}; {setting.doc}{choices}")
        )


def _show_faults(kinds: list[dict[str, Any]]) -> None:
    if not kinds:
        typer.echo("no simulated driver declares any fault")
        return
    typer.echo("faults that a [[fault]] table in world.toml may name as its kind:")
    width = max(len(entry["kind"]) for entry in kinds)
    for entry in kinds:
        typer.echo(printable(f"  {entry['kind']:<{width}}  {entry['doc']}".rstrip()))
    typer.echo("its other keys:")
    for key in kinds[0]["keys"]:
        state = "required" if key["required"] else "optional"
        choices = f"; one of {', '.join(key['choices'])}" if key["choices"] else ""
        typer.echo(printable(f"  {key['name']:<{width}}  {state}; {key['doc']}{choices}"))
