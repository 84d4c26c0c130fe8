"""bench.toml and its world into a ``BenchSpec``, or every problem of the two at once."""

from __future__ import annotations

import importlib.resources
import os
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from bench.errors import InputError, Problem, SpecError
from bench.spec.lines import line_of
from bench.spec.model import BenchSpec, ClimateSpec, SimulationSpec, SourceSpec
from bench.spec.problems import Problems, nearest, row_paths
from bench.spec.reading import LARGEST_BYTES, read_text, read_toml

if TYPE_CHECKING:
    from bench.spec import schema
    from bench.spec.declarations import Declared
    from bench.spec.schema import Table

__all__ = ["FoundBench", "find_bench", "load_bench"]

_MEND = "`evenarm new DIR` writes a complete bench.toml to start from"
_MEND_WORLD = "name the file in [simulation] world; `evenarm new DIR` writes one"
DeclaredOf = Callable[[str, str], Any]


@dataclass(frozen=True)
class FoundBench:
    """Which bench.toml a command uses, and whether it is the one inside the package."""

    path: Path
    shipped: bool


def find_bench(given: Path | None, cwd: Path) -> FoundBench:
    """``given`` where it is not None, else bench.toml in ``cwd``, else the shipped bench."""
    if given is not None:
        return FoundBench(cwd / given, False)
    here = cwd / "bench.toml"
    if os.path.lexists(here):
        return FoundBench(here, False)
    shipped = Path(str(importlib.resources.files("bench"))) / "shipped" / "default" / "bench.toml"
    return FoundBench(shipped, True)


def load_bench(
    path: Path,
    *,
    declared: DeclaredOf,
    known_drivers: Callable[[str], Sequence[str]] | None = None,
    records_folder: Path | None = None,
    seed: int | None = None,
) -> BenchSpec:
    """Read and check a bench.

    ``declared(kind, name)`` gives a driver's declaration (``drivers.contracts.Driver``) or None
    where there is none, and may raise ImportError for one that is broken; ``known_drivers(kind)``
    gives the names to choose from. ``records_folder`` keeps the journal there instead of where the
    file says; ``seed`` replaces the simulation's. Raises InputError, and SpecError with every
    problem of bench.toml and world.toml.
    """
    path = Path(os.path.abspath(path))
    what = "the bench description"
    if os.path.isdir(path) and os.path.isfile(path / "bench.toml"):
        raise InputError(
            f"{what} is a folder, not a file", where=str(path), mend=f"give {path / 'bench.toml'}"
        )
    raw, sha256 = read_toml(path, what, _MEND)
    from bench.spec import checks
    from bench.spec.sources import build_source

    problems = Problems()
    checks.reserved(raw, problems)
    tables = _tables(raw, problems)
    rows = _source_tables(raw, problems)
    sources = [
        None if row is None else build_source(row, raw["source"][i], name, path.parent, problems)
        for i, (name, row) in enumerate(rows)
    ]
    checks.sources(rows, "changer" in raw, problems)
    unit = checks.signal_unit(tables.get("detector"), rows, problems)
    path_factor = checks.path_factor(tables.get("bench"), raw.get("bench"), problems)
    checks.stage_and_expect(tables, raw, problems)
    checks.longest_move(tables, raw, sources, path_factor, problems)
    checks.detector(tables.get("detector"), raw, problems)
    named = [(name, source) for (name, _), source in zip(rows, sources, strict=True)]
    glass = checks.glass(tables, named, problems)
    climate = _climate(tables, problems)
    settings, drivers = _drivers(raw, declared, known_drivers, unit, problems)
    simulation, world = _world(tables, raw, drivers, path, unit, seed, sources, problems)
    url = checks.records_url(tables.get("records"), path.parent, records_folder, problems)
    if problems.found:
        number = len(problems.found)
        raise SpecError(
            f"{what} has {number} problem{'s' * (number != 1)}",
            where=str(path),
            problems=_with_lines(problems, path, raw),
            mend="mend the keys named above; `evenarm check` reads the file again",
        )
    return _spec(
        path, sha256, tables, tuple(s for s in sources if s is not None), path_factor, glass,
        climate, settings, drivers, simulation, world, url, unit,
    )  # fmt: skip


def _with_lines(problems: Problems, path: Path, raw: Mapping[str, Any]) -> tuple[Problem, ...]:
    """The problems with the lines of bench.toml where their keys stand, in that order."""
    from dataclasses import replace

    text, _ = read_text(path, "the bench description", _MEND)
    rows = {"source": row_paths("source", raw.get("source"))}
    placed = [
        problem
        if ": " in problem.path  # it stands in another file
        else replace(problem, at_line=line_of(text, problem.path, rows))
        for problem in problems.found
    ]
    return tuple(sorted(placed, key=lambda problem: problem.at_line or LARGEST_BYTES))


def _tables(raw: Mapping[str, Any], problems: Problems) -> dict[str, Any]:
    """Every table but the sources, validated; those with problems are left out."""
    from bench.spec import checks, schema

    found: dict[str, Any] = {}
    for name, value in raw.items():
        if name not in schema.TABLES:
            if name not in checks.RESERVED:
                problems.unknown_key(name, value, name, schema.TABLES)
        elif name != "source" and not checks.is_reserved(name, value):
            table: Table | None = problems.table(schema.TABLES[name], value, name)
            if table is not None:
                found[name] = table
    for name in schema.REQUIRED:
        if name not in raw:
            problems.missing(f"[[{name}]]" if name == "source" else f"[{name}]", "a table")
    for name in ("accept", "records"):
        if name not in raw:
            found[name] = schema.TABLES[name]()
    return found


def _source_tables(
    raw: Mapping[str, Any], problems: Problems
) -> list[tuple[str, schema.Source | None]]:
    """Path and table of each [[source]] of the file; None for one that is no table."""
    from bench.spec import schema

    rows = raw.get("source", [])
    if not isinstance(rows, list) or not rows:
        if "source" in raw:
            problems.add("source", rows, "must be one or more tables [[source]]")
        return []
    paths = row_paths("source", rows)
    return [
        (path, problems.table(schema.Source, row, path))
        for path, row in zip(paths, rows, strict=True)
    ]


def _climate(tables: Mapping[str, Any], problems: Problems) -> ClimateSpec | None:
    table = tables.get("climate")
    if table is None:
        return None
    if table.driver is None:
        for key in ("temperature", "pressure", "humidity"):
            if getattr(table, key) is None and not problems.about(
                f"climate.{key}", "climate.driver"
            ):
                problems.missing(f"climate.{key}", "where no driver measures it")
    return ClimateSpec(
        driver=table.driver,
        temperature_c=20.0 if table.temperature is None else table.temperature - 273.15,
        pressure_pa=101325.0 if table.pressure is None else table.pressure,
        relative_humidity=0.5 if table.humidity is None else table.humidity,
    )


def _drivers(
    raw: Mapping[str, Any],
    declared: DeclaredOf,
    known_drivers: Callable[[str], Sequence[str]] | None,
    unit: str,
    problems: Problems,
) -> tuple[dict[str, dict[str, Any]], dict[str, Declared]]:
    """The settings of every device in the units declared, and the drivers, by kind.

    Looked for in the file as it is, so that a table with another fault hides none of these.
    """
    from bench.spec.declarations import check_table

    settings: dict[str, dict[str, Any]] = {}
    drivers: dict[str, Declared] = {}
    for kind in ("stage", "detector", "changer", "climate"):
        table = raw.get(kind)
        name = table.get("driver") if isinstance(table, dict) else None
        if table is None or not isinstance(name, str):
            continue
        try:
            driver = declared(kind, name)
        except ImportError as error:
            problems.add(f"{kind}.driver", name, str(error))
            continue
        if driver is None:
            names = list(known_drivers(kind)) if known_drivers is not None else []
            listed = f"; there are: {', '.join(names)}" if names else ""
            allowed = f"there is no {kind} driver of that name{listed} (see: evenarm drivers)"
            problems.add(f"{kind}.driver", name, allowed, nearest(name, names))
            continue
        drivers[kind] = driver
        own = table.get("settings", {})
        settings[kind] = check_table(
            own if isinstance(own, dict) else {},
            driver.settings,
            path=f"{kind}.settings.",
            signal_unit=unit,
            problems=problems,
        )
    return settings, drivers


def _world(
    tables: Mapping[str, Any],
    raw: Mapping[str, Any],
    drivers: Mapping[str, Declared],
    path: Path,
    unit: str,
    seed: int | None,
    sources: Sequence[SourceSpec | None],
    problems: Problems,
) -> tuple[SimulationSpec | None, dict[str, Any]]:
    """The hidden truth, where a simulated device is used."""
    from bench.spec.declarations import check_table

    simulated = [driver for driver in drivers.values() if driver.simulated]
    if not simulated:
        return None, {}
    table = tables.get("simulation")
    if table is None or table.world is None:
        if "simulation" not in raw:
            problems.missing("[simulation]", 'simulated devices need it: world = "world.toml"')
        return None, {}
    if seed is not None and not 0 <= seed < 2**63:
        problems.add("--seed", seed, "must be a whole number from 0")
    file = path.parent / table.world
    simulation = SimulationSpec(file, table.seed if seed is None else seed)
    try:
        tree, _ = read_toml(file, "the simulated world", _MEND_WORLD)
    except InputError as error:
        text = "; ".join(part for part in (error.what, error.why, error.mend) if part)
        problems.add("simulation.world", table.world, f"{text} ({error.where})")
        return simulation, {}
    world = check_table(
        tree,
        [setting for driver in simulated for setting in driver.world],
        path=f"{table.world}: ",
        signal_unit=unit,
        problems=problems,
    )
    names = [source.name for source in sources if source is not None]
    written = tree.get("source", [])
    for place, row in zip(row_paths("source", written), world.get("source", []), strict=False):
        name = row.get("name")
        if isinstance(name, str) and name not in names and None not in sources:
            where = f"{table.world}: {place}.name"
            problems.add(where, name, "is no [[source]] of bench.toml", nearest(name, names))
    return simulation, world


def _spec(
    path: Path,
    sha256: str,
    tables: Mapping[str, Any],
    sources: tuple[SourceSpec, ...],
    path_factor: float,
    glass: str | None,
    climate: ClimateSpec | None,
    settings: Mapping[str, Mapping[str, Any]],
    drivers: Mapping[str, Declared],
    simulation: SimulationSpec | None,
    world: Mapping[str, Any],
    url: str,
    unit: str,
) -> BenchSpec:
    from dataclasses import replace

    from bench.spec import build

    bench = tables["bench"]
    if climate is not None:
        climate = replace(climate, settings=settings.get("climate", {}))
    wavelength_m = bench.reference_wavelength
    return BenchSpec(
        name=bench.name,
        path=path,
        sha256=sha256,
        path_factor=path_factor,
        air_index=build.air_index(climate, wavelength_m or sources[0].mean_wavelength_m),
        reference_wavelength_m=wavelength_m,
        safety_contact=bench.safety_contact,
        allow_unattended=bench.allow_unattended,
        accept=build.accept(tables["accept"]),
        stage=build.stage(tables["stage"], settings["stage"]),
        detector=build.detector(tables["detector"], settings["detector"], unit),
        sources=sources,
        expect=build.expect(tables.get("expect")),
        glass=glass,
        climate=climate,
        changer=build.changer(tables.get("changer"), settings.get("changer", {})),
        records_url=url,
        simulation=simulation,
        simulated=all(driver.simulated for driver in drivers.values()),
        world=world,
    )
