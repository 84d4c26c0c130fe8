"""``evenarm check``: how the bench is understood, and what is wrong with it."""

from __future__ import annotations

import re
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from bench.cli.output import EXIT_DONE, EXIT_NEGATIVE, emit_json, note, quantity, report_error
from bench.errors import EvenarmError, printable

if TYPE_CHECKING:
    from bench.spec.model import BenchSpec
    from drivers.contracts import Identity

__all__ = ["command", "failures", "warnings"]


def command(
    bench: Annotated[
        Path | None, typer.Option("--bench", help="The bench description to check.")
    ] = None,
    connect: Annotated[
        bool, typer.Option("--connect", help="Open every device and ask who it is.")
    ] = False,
    as_json: Annotated[bool, typer.Option("--json", help="One JSON document.")] = False,
) -> None:
    """Check the bench description, procedures and devices. Moves nothing."""
    from bench.cli.benchfile import open_bench
    from bench.procedure.text import load_all

    try:
        spec = open_bench(bench)
        procedures = [(p.name, p.path, p.title) for p in load_all(spec.folder)]
        identities = _identities(spec) if connect else None
    except EvenarmError as error:
        raise typer.Exit(report_error(error, as_json=as_json)) from None
    failed, warned = failures(spec), warnings(spec)
    if as_json:
        emit_json(_document(spec, procedures, identities, failed, warned))
    else:
        _show(spec, procedures, identities)
        for text in warned:
            typer.echo(f"warning  {printable(text, 600)}")
        for text in failed:
            typer.echo(f"FAILED   {printable(text, 600)}")
        typer.echo(_verdict(len(failed), len(warned)))
    raise typer.Exit(EXIT_NEGATIVE if failed else EXIT_DONE)


def _verdict(failed: int, warned: int) -> str:
    if failed:
        return f"{failed} check{'s' * (failed != 1)} failed"
    if warned:
        return f"passed with {warned} warning{'s' * (warned != 1)}"
    return "every check passed"


def failures(spec: BenchSpec) -> list[str]:
    """What keeps a run from being made, though the file can be read."""
    found = []
    if spec.stage.travel_m is None:
        found.append("[stage] has no travel: without soft limits there is no motion")
    return found


def warnings(spec: BenchSpec) -> list[str]:
    """What a run can be made with, but should not be."""
    found = []
    for source in spec.sources:
        if source.laser_class is None:
            found.append(
                f"source {source.name!r} has no laser_class: the strictest cautions will be shown"
            )
        elif source.laser_class == "none" and source.risk_group is None:
            found.append(
                f"source {source.name!r} has no risk_group: the strictest for lamps is shown"
            )
        top = None if spec.detector.range is None else spec.detector.range[1]
        if top is not None and (spec.detector.dark or 0.0) + 2 * source.signal > top:
            found.append(
                f"source {source.name!r}: fringes twice as large as its signal would go beyond "
                "the detector's range"
            )
    if spec.safety_contact is None:
        found.append("[bench] has no safety_contact: nobody is named with the cautions")
    if spec.stage.reversal_allowance_m == 0.0:
        found.append(
            "[stage] reversal_allowance is zero: play of the stage goes straight into the zero"
        )
    if spec.expect is None:
        found.append("there is no [expect]: the zero may be anywhere in the travel")
    if spec.reference_wavelength_m is None:
        found.append(
            "[bench] has no reference_wavelength: with glass in one arm the zero then depends on "
            "the source"
        )
    if spec.detector.noise is None:
        found.append("[detector] has no noise: plans assume one until it is measured")
    if spec.detector.range is None:
        found.append("[detector] has no range: saturated readings cannot be told")
    if spec.detector.dark is None:
        found.append("[detector] has no dark: no contrast can be stated")
    return found


def _identities(spec: BenchSpec) -> dict[str, Identity]:
    from bench.procedure.devices import open_devices

    note("talking to the devices ...")
    devices = open_devices(spec)
    try:
        return devices.identities()
    finally:
        devices.close()


def _devices(spec: BenchSpec) -> list[tuple[str, str, dict[str, Any]]]:
    """Kind, driver and settings of every device that the bench names."""
    rows: list[tuple[str, str, dict[str, Any]]] = [
        ("stage", spec.stage.driver, dict(spec.stage.settings)),
        ("detector", spec.detector.driver, dict(spec.detector.settings)),
    ]
    if spec.changer is not None:
        rows.append(("changer", spec.changer["driver"], dict(spec.changer["settings"])))
    if spec.climate is not None and spec.climate.driver is not None:
        rows.append(("climate", spec.climate.driver, dict(spec.climate.settings)))
    return rows


def _settings(kind: str, name: str, values: dict[str, Any], unit: str) -> list[dict[str, Any]]:
    """The settings as understood, each with the unit that it has arrived in."""
    from drivers import registry

    declared = registry.declared(kind, name)
    rows: list[dict[str, Any]] = []
    for setting in declared.settings if declared is not None else ():
        if setting.name in values:
            bare = setting.unit in {"", "text", "bool", "int"}
            shown = "" if bare else unit if setting.unit == "signal" else setting.unit
            rows.append({"name": setting.name, "value": values[setting.name], "unit": shown})
    return rows


def _given(kind: str, name: str, rows: list[dict[str, Any]]) -> list[dict[str, Any]]:
    """The settings that are not what the driver takes by itself."""
    from drivers import registry

    declared = registry.declared(kind, name)
    usual = {} if declared is None else {item.name: item.default for item in declared.settings}
    return [row for row in rows if row["value"] != usual.get(row["name"])]


def _convenient(value: float, unit: str) -> tuple[float, str]:
    """5 mV for 0.005 V and 1 kHz for 1000 Hz: a number that people read at a glance."""
    if unit not in {"V", "A", "W", "Hz"} or not value or 0.1 <= abs(value) < 1000.0:
        return value, unit
    prefixes = (("G", 1e9), ("M", 1e6), ("k", 1e3), ("", 1.0), ("m", 1e-3), ("u", 1e-6))
    prefix, size = next((row for row in prefixes if abs(value) >= 0.9999 * row[1]), ("n", 1e-9))
    return value / size, prefix + unit


def _stage_facts(spec: BenchSpec) -> list[tuple[str, Any]]:
    stage = spec.stage
    travel = stage.travel_m
    return [
        ("travel", None if travel is None else [quantity(end * 1e3, "mm") for end in travel]),
        ("speed", quantity(stage.speed_m_s * 1e3, "mm/s")),
        ("acceleration", quantity(stage.acceleration_m_s2 * 1e3, "mm/s^2")),
        ("resolution", quantity(stage.resolution_m * 1e9, "nm")),
        ("settle", quantity(stage.settle_s * 1e3, "ms")),
        ("approach", stage.approach),
        ("reversal_allowance", quantity(stage.reversal_allowance_m * 1e6, "um")),
        ("longest_move", quantity(stage.longest_move_m * 1e3, "mm")),
    ]


def _detector_facts(spec: BenchSpec) -> list[tuple[str, Any]]:
    detector, unit = spec.detector, spec.detector.unit
    limits = detector.range
    return [
        ("rate", quantity(detector.rate_hz, "Hz")),
        ("integration", quantity(detector.integration_s * 1e3, "ms")),
        ("lag", quantity(detector.lag_s * 1e3, "ms")),
        ("range", None if limits is None else [quantity(end, unit) for end in limits]),
        ("dark", None if detector.dark is None else quantity(detector.dark, unit)),
        ("noise", None if detector.noise is None else quantity(detector.noise, unit)),
    ]


def _source_facts(spec: BenchSpec) -> list[dict[str, Any]]:
    unit = spec.detector.unit
    return [
        {
            "name": source.name,
            "mean_wavelength": quantity(source.mean_wavelength_m * 1e9, "nm"),
            "coherence_length": {
                "rule": quantity(source.coherence_rule_m * 1e6, "um"),
                "fwhm": quantity(source.coherence_fwhm_m * 1e6, "um"),
                "integral": quantity(source.coherence_integral_m * 1e6, "um"),
            },
            "signal": quantity(source.signal, unit),
            "change_time": quantity(source.change_time_s, "s"),
            "warm_up": quantity(source.warm_up_s, "s"),
            "laser_class": source.laser_class,
            "risk_group": source.risk_group,
            "position": source.position,
        }
        for source in spec.sources
    ]


def _document(
    spec: BenchSpec,
    procedures: list[tuple[str, Path, str]],
    identities: dict[str, Identity] | None,
    failed: list[str],
    warned: list[str],
) -> dict[str, Any]:
    facts = {"stage": dict(_stage_facts(spec)), "detector": dict(_detector_facts(spec))}
    document: dict[str, Any] = {
        "schema": "evenarm.check/1",
        "bench": spec.name,
        "file": str(spec.path),
        "sha256": spec.sha256,
        "passed": not failed,
        "failed": failed,
        "warnings": warned,
        "simulated": spec.simulated,
        "path_factor": spec.path_factor,
        "air_index": spec.air_index,
        "devices": {
            kind: {
                "driver": name,
                **facts.get(kind, {}),
                "settings": _settings(kind, name, values, spec.detector.unit),
            }
            for kind, name, values in _devices(spec)
        },
        "sources": _source_facts(spec),
        "glass": spec.glass,
        "records": spec.records_url,
        "procedures": [
            {"name": name, "file": str(path), "title": title} for name, path, title in procedures
        ],
    }
    if identities is not None:
        from dataclasses import asdict

        document["identities"] = {
            role: {key: printable(value) if isinstance(value, str) else value
                   for key, value in asdict(identity).items()}
            for role, identity in identities.items()
        }  # fmt: skip
    return document


def _place(url: str) -> str:
    """A file's path as people write it; another database as its URL, without a password."""
    if url.startswith("sqlite"):
        return url.partition(":///")[2]
    return re.sub(r"(//[^/:@]*):[^/@]*@", r"\1:***@", url)


def _words(value: Any) -> str:
    """A fact as text: a quantity, a pair of them, a word."""
    from bench.quantities import show

    if value is None:
        return "not given"
    if isinstance(value, dict):
        number, unit = _convenient(value["value"], value["unit"])
        return show(number, None, unit)
    if isinstance(value, list):
        return " to ".join(_words(item) for item in value)
    return str(value)


def _show(
    spec: BenchSpec,
    procedures: list[tuple[str, Path, str]],
    identities: dict[str, Identity] | None,
) -> None:
    from bench.quantities import show, show_length

    def line(label: str, text: object) -> None:
        typer.echo(printable(f"{label:<9}{text}", 600))

    line("bench", f"{spec.name} - {spec.path}")
    grows = "grows" if spec.path_factor > 0 else "shrinks"
    line("", f"path factor {spec.path_factor:+g}: OPD (arm A minus arm B) {grows} with the reading")
    opd = show(abs(spec.opd_per_m), None, "mm")
    line("", f"1 mm of reading is {opd} of OPD (refractive index of air {spec.air_index:.6f})")
    if spec.reference_wavelength_m is not None:
        line("", f"the zero is that at {show_length(spec.reference_wavelength_m)}")
    accept = spec.accept
    line(
        "accept",
        f"|residual OPD| + {accept.coverage_factor:g} x its standard uncertainty within "
        f"{show_length(accept.residual_opd_m)}, two scans within "
        f"{show_length(accept.scans_agree_m)} of OPD",
    )
    facts = {"stage": _stage_facts(spec), "detector": _detector_facts(spec)}
    for kind, name, values in _devices(spec):
        line(kind, f"driver {name}")
        for key, value in facts.get(kind, []):
            line("", f"{key.replace('_', ' '):<20}{_words(value)}")
        for row in _given(kind, name, _settings(kind, name, values, spec.detector.unit)):
            line("", f"{row['name']:<20}{row['value']} {row['unit']}".rstrip())
        if identities is not None and kind in identities:
            who = identities[kind]
            told = " ".join(p for p in (who.maker, who.model, who.serial, who.firmware) if p)
            line("", f"{'answers as':<20}{told}{' (simulated)' * who.simulated}")
    width = max(len(source.name) for source in spec.sources)
    line("sources", f"{'':<{width}}  mean wave-  coherence length (OPD)            fringe")
    line("", f"{'':<{width}}  length      rule        fwhm      integral  amplitude  change")
    for source in spec.sources:
        lengths = [
            f"{show_length(float(f'{length_m:.3g}')):<11}"
            for length_m in (
                source.coherence_rule_m,
                source.coherence_fwhm_m,
                source.coherence_integral_m,
            )
        ]
        line(
            "",
            f"{source.name:<{width}}  {show(source.mean_wavelength_m * 1e9, None, 'nm'):<11} "
            f"{' '.join(lengths)} {_words(quantity(source.signal, spec.detector.unit)):<10} "
            f"{show(source.change_time_s, None, 's')}",
        )
    if spec.expect is not None:
        half = spec.expect.half_width_m
        sd = spec.expect.standard_uncertainty_m
        reach = (
            f"within {show_length(half)}"
            if half is not None
            else f"with a standard uncertainty of {show_length(sd or 0.0)}"
        )
        line("expect", f"the zero at {show_length(spec.expect.zero_m)}, {reach}")
    line("glass", spec.glass or "not given")
    line("records", _place(spec.records_url))
    for index, (name, path, title) in enumerate(procedures):
        line("" if index else "runs", f"{name}: {title} ({path})")
