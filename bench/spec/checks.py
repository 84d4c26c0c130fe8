"""What has to hold between the keys of bench.toml: each check adds its problems to the list."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from bench.quantities import DIMENSIONS, dimension_of, show, show_length
from bench.spec.build import longest_move_m
from bench.spec.model import SourceSpec
from bench.spec.problems import Problems, nearest

if TYPE_CHECKING:
    from bench.spec import schema

# Widths of its packet that the shortest scan is long: the packet, its lobes and some plain noise.
# Common practice, no source; the plan draws its final scans so.
SCAN_PACKETS = 6.0

# Names that a later form of the file will use; what stands in their place now.
RESERVED = {
    "signal": "two outputs combined into one signal are reserved for later",
    "reference": "a laser as ruler is reserved for later",
    "mount": "mirror mounts are reserved for later",
    "path_table": "a table from reading to path difference is reserved for later; use path_factor",
}
_ARRAYS = {
    "stage": "more than one stage is reserved for later: write one [stage]",
    "detector": "more than one detector is reserved for later: write one [detector]",
}
_KEYS = {
    ("stage", "role"): "stages with roles are reserved for later",
    ("detector", "port"): "detectors at named ports are reserved for later",
    ("bench", "path_table"): RESERVED["path_table"],
    ("stage", "path_table"): RESERVED["path_table"],
}


FACTOR_KEYS = ("bench.path_factor", "bench.moving_arm", "bench.increasing", "bench.folds")


def is_reserved(name: str, value: object) -> bool:
    """Whether this form of a known table is one that is reserved."""
    return name in _ARRAYS and isinstance(value, list)


def reserved(raw: dict[str, Any], problems: Problems) -> None:
    """Say so of every reserved name, and take the reserved keys of known tables out of ``raw``."""
    for name, value in raw.items():
        if name in RESERVED:
            problems.add(name, value, RESERVED[name])
        elif is_reserved(name, value):
            problems.add(name, value, _ARRAYS[name])
    for (table, key), text in _KEYS.items():
        inner = raw.get(table)
        if isinstance(inner, dict) and key in inner:
            problems.add(f"{table}.{key}", inner.pop(key), text)


def path_factor(table: schema.Bench | None, raw: object, problems: Problems) -> float:
    """The signed factor, from itself or from which arm moves; 1 where there is a problem.

    OPD is arm A minus arm B, so it grows where A gets longer or B shorter.
    """
    from bench.spec.schema import Bench

    if not isinstance(raw, Mapping) or table is None:
        return 1.0
    worded = [key for key in ("moving_arm", "increasing", "folds") if key in raw]
    field = Bench.model_fields["path_factor"].description or ""
    if not worded and "path_factor" not in raw:
        problems.missing("bench.path_factor", f"{field}; or moving_arm and increasing")
    if "path_factor" in raw:
        if worded:
            problems.add(
                f"bench.{worded[0]}", raw[worded[0]], "path_factor says it already; keep one"
            )
        return table.path_factor or 1.0
    if not worded or problems.about(*FACTOR_KEYS):
        return 1.0
    for key in ("moving_arm", "increasing"):
        if key not in raw:
            problems.missing(f"bench.{key}", str(Bench.model_fields[key].description))
    longer = (table.moving_arm == "A") == (table.increasing == "longer")
    return table.folds if longer else -table.folds


def sources(
    rows: Sequence[tuple[str, schema.Source | None]], has_changer: bool, problems: Problems
) -> None:
    """No name twice; with a changer, a position for each and none twice. Rows are path, table."""
    seen: dict[str, str] = {}
    positions: dict[str, str] = {}
    for path, source in rows:
        if source is None:
            continue
        if source.name in seen:
            problems.add(f"{path}.name", source.name, f"{seen[source.name]} has that name already")
        elif source.name is not None:
            seen[source.name] = path
        if source.position is not None and source.position in positions:
            allowed = f"{positions[source.position]} is there already"
            problems.add(f"{path}.position", source.position, allowed)
        elif source.position is not None:
            positions[source.position] = path
        elif has_changer and not problems.about(f"{path}.position"):
            problems.missing(f"{path}.position", "where the changer has it, as text")


def signal_unit(
    table: schema.Detector | None,
    rows: Sequence[tuple[str, schema.Source | None]],
    problems: Problems,
) -> str:
    """The SI unit of the detector's signal; every signal of the file must measure the same.

    The first that is stated, of range, dark, noise and the sources in that order, decides.
    """
    stated: list[tuple[str, Any]] = []
    if table is not None:
        if table.range is not None:
            stated += [(f"detector.range[{end}]", table.range[end]) for end in (0, 1)]
        stated += [(f"detector.{key}", getattr(table, key)) for key in ("dark", "noise")]
    stated += [(f"{row}.signal", source.signal) for row, source in rows if source is not None]
    first: tuple[str, str] | None = None
    for path, quantity in stated:
        if quantity is None:
            continue
        dimension = dimension_of(quantity.unit)
        if first is None:
            first = (path, dimension)
        elif dimension != first[1]:
            problems.add(
                path, str(quantity), f"must be a {first[1]} like {first[0]}, not a {dimension}"
            )
    return DIMENSIONS[first[1] if first is not None else "voltage"][1]


def stage_and_expect(tables: Mapping[str, Any], raw: Mapping[str, Any], problems: Problems) -> None:
    """Moves fit into the travel, and the zero is expected within it."""
    stage: schema.Stage | None = tables.get("stage")
    table: schema.Expect | None = tables.get("expect")
    keys = ("expect.zero", "expect.half_width", "expect.standard_uncertainty")
    if table is not None and not problems.about(*keys):
        uncertain = bool(table.zero.standard_uncertainty)
        if table.half_width is not None and table.standard_uncertainty is not None:
            problems.add(
                "expect.standard_uncertainty",
                raw["expect"]["standard_uncertainty"],
                "half_width says it already; keep one",
            )
        elif (table.half_width, table.standard_uncertainty) == (None, None) and not uncertain:
            problems.missing("expect.half_width", "half_width or standard_uncertainty")
    if stage is None or stage.travel is None:
        return
    low, high = stage.travel
    limits = f"{show_length(low)} to {show_length(high)}"
    for key in ("longest_move", "reversal_allowance", "resolution"):
        value = getattr(stage, key)
        if value is not None and value > high - low:
            allowed = f"must fit into the travel, {limits}"
            problems.add(f"stage.{key}", raw["stage"].get(key, show_length(value)), allowed)
    if table is None or table.zero is None:
        return
    half = table.half_width or 0.0
    slack = 1e-9 * (high - low)
    if not (low - slack <= table.zero.si - half and table.zero.si + half <= high + slack):
        reach = show_length(table.zero.si)
        if half:
            reach = f"{show_length(table.zero.si - half)} to {show_length(table.zero.si + half)}"
        problems.add(
            "expect.zero",
            raw["expect"]["zero"],
            f"{reach} is not within [stage] travel, {limits}",
        )


def longest_move(
    tables: Mapping[str, Any],
    raw: Mapping[str, Any],
    sources: Sequence[SourceSpec | None],
    path_factor: float,
    problems: Problems,
) -> None:
    """One command has room for the overshoot and for the shortest packet; the rest is the plan's.

    Run-up and run-out are not counted, because a slow scan needs next to none. Where the travel
    itself is as short, or no packet fits into it, the plan says what cannot be done.
    """
    stage: schema.Stage | None = tables.get("stage")
    needed = (*FACTOR_KEYS, "bench", "[bench]", "stage.longest_move", "stage.reversal_allowance")
    unknown = any(problem.path in needed for problem in problems.found)
    if stage is None or stage.travel is None or unknown or not sources or None in sources:
        return
    length_m = min(source.coherence_fwhm_m for source in sources if source is not None)
    scan_m = SCAN_PACKETS * length_m / abs(path_factor)
    least_m = stage.reversal_allowance + scan_m
    longest_m, travel_m = longest_move_m(stage), stage.travel[1] - stage.travel[0]
    if longest_m < least_m <= travel_m and longest_m < travel_m:
        problems.add(
            "stage.longest_move",
            raw["stage"].get("longest_move", show_length(longest_m)),
            f"no scan fits: must be at least {show_length(float(f'{least_m:.3g}'))}, for "
            f"reversal_allowance and {SCAN_PACKETS:g} widths of the shortest packet",
        )


def detector(table: schema.Detector | None, raw: Mapping[str, Any], problems: Problems) -> None:
    """A reading ends before the next begins; dark and noise are possible within the range."""
    if table is None:
        return
    rate_hz: float | None = table.rate
    if table.integration and rate_hz and table.integration * rate_hz > 1 + 1e-9:
        longest = show(1e3 / rate_hz, None, "ms")
        problems.add(
            "detector.integration",
            raw["detector"]["integration"],
            f"must be at most one over the rate, {longest}",
        )
    if table.range is None:
        return
    low, high = (end.si for end in table.range)
    if table.dark is not None and not low <= table.dark.si <= high:
        problems.add("detector.dark", raw["detector"]["dark"], "must be within range")
    if table.noise is not None and table.noise.si >= high - low:
        problems.add("detector.noise", raw["detector"]["noise"], "must be smaller than the range")


def glass(
    tables: Mapping[str, Any],
    built: Sequence[tuple[str, SourceSpec | None]],
    problems: Problems,
) -> str | None:
    """The material's name as the catalogue writes it, where its index is known for every source."""
    table: schema.Glass | None = tables.get("glass")
    if table is None or problems.about("glass.material"):
        return None
    from bench.optics import glass as catalogue

    try:
        name = catalogue.material(table.material).name
    except ValueError:
        known = list(catalogue.MATERIALS)
        allowed = f"is not known; known: {', '.join(known)}"
        problems.add("glass.material", table.material, allowed, nearest(table.material, known))
        return None
    bench: schema.Bench | None = tables.get("bench")
    wanted = [("bench.reference_wavelength", bench.reference_wavelength if bench else None)]
    wanted += [
        (f"{row}.spectrum", 1.0 / edge)
        for row, source in built
        if source is not None
        for edge in source.band
    ]
    for path, wavelength_m in wanted:
        if wavelength_m is None:
            continue
        try:
            catalogue.index(name, wavelength_m)
        except ValueError as error:
            problems.add(path, show_length(wavelength_m), str(error))
    return name


def records_url(
    table: schema.Records | None, folder: Path, records_folder: Path | None, problems: Problems
) -> str:
    """Where the journal is, a relative SQLite file counted from ``folder``."""
    if records_folder is not None:
        return f"sqlite:///{records_folder.absolute() / 'journal.sqlite3'}"
    if table is None or problems.about("records.url"):
        return ""
    scheme, mark, rest = table.url.partition("://")
    if not mark or scheme.split("+")[0] not in {"sqlite", "postgresql"}:
        allowed = 'must be like "sqlite:///logs/journal.sqlite3"'
        problems.add("records.url", table.url, allowed)
        return ""
    if not scheme.startswith("sqlite"):
        return table.url
    name = rest.removeprefix("/")
    if not rest.startswith("/") or not name or ":memory:" in name or "?" in name:
        problems.add(
            "records.url",
            table.url,
            'records are kept in a file: "sqlite:///" and a file name relative to bench.toml',
        )
        return ""
    return f"{scheme}:///{folder / name}"
