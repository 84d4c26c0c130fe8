"""``evenarm fit``: locate the zero in recorded scans."""

from __future__ import annotations

import math
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from bench.cli.output import (
    EXIT_DONE,
    EXIT_INPUT,
    EXIT_NEGATIVE,
    emit_json,
    note,
    quantity,
    report_error,
)
from bench.errors import EvenarmError, UsageError, printable

if TYPE_CHECKING:
    from bench.fringes.model import Estimate, Located, Notice
    from bench.quantities import Quantity
    from bench.scanfile import ScanFile, ScanOptions

__all__ = ["command", "fit_document", "fit_lines"]


def command(
    files: Annotated[list[str], typer.Argument(metavar="FILE...", help="Recorded scans.")],
    position: Annotated[
        str | None, typer.Option("--position", metavar="COLUMN", help="The position's column.")
    ] = None,
    signal: Annotated[
        str | None, typer.Option("--signal", metavar="COLUMN", help="The signal's column.")
    ] = None,
    position_unit: Annotated[
        str | None,
        typer.Option(
            "--position-unit",
            metavar="QUANTITY",
            help='What one unit of the position is worth, such as "18.55(74) pm".',
        ),
    ] = None,
    is_opd: Annotated[
        bool, typer.Option("--is-opd", help="The position is an optical path difference.")
    ] = False,
    path_factor: Annotated[
        float | None,
        typer.Option("--path-factor", help="Change of A-minus-B path a unit of position, signed."),
    ] = None,
    material: Annotated[
        str | None, typer.Option("--material", help="What any residual glass is made of.")
    ] = None,
    at: Annotated[
        str | None,
        typer.Option("--at", metavar="QUANTITY", help="Vacuum wavelength of the group zero."),
    ] = None,
    bench: Annotated[
        Path | None, typer.Option("--bench", help="The bench that the scans come from.")
    ] = None,
    source: Annotated[
        str | None, typer.Option("--source", help="The bench's source that was in use.")
    ] = None,
    as_json: Annotated[bool, typer.Option("--json", help="One JSON document a line.")] = False,
) -> None:
    """Locate the zero in recorded scans."""
    from bench.fringes import locate
    from bench.scanfile import ScanOptions, read_scan_file

    try:
        options = ScanOptions(
            position=position,
            signal=signal,
            position_unit=position_unit,
            is_opd=is_opd,
            path_factor=path_factor,
            material=material,
            at=at,
        )
        if is_opd and path_factor is not None:
            raise UsageError(
                "--is-opd and --path-factor exclude each other",
                where="--path-factor",
                why="a position that is an optical path difference has no path factor",
                mend="leave one of the two out",
            )
        options = _with_bench(options, bench, source)
    except EvenarmError as error:
        raise typer.Exit(report_error(error, as_json=as_json)) from None
    worst = EXIT_DONE
    for index, name in enumerate(files):
        try:
            scan_file = read_scan_file(name, options)
        except EvenarmError as error:
            report_error(error, as_json=as_json)
            worst = EXIT_INPUT
            continue
        located = locate(scan_file.scan, scan_file.knowledge)
        if not located.found:
            worst = max(worst, EXIT_NEGATIVE)
        if scan_file.bad_rows:
            note(_bad_rows_text(scan_file))
        if scan_file.ignored_unit:
            note(_ignored_unit_text(scan_file))
        if as_json:
            emit_json(fit_document(scan_file, located))
        else:
            for line in ([""] if index else []) + fit_lines(scan_file, located):
                typer.echo(line)
    raise typer.Exit(worst)


def _with_bench(options: ScanOptions, bench: Path | None, source: str | None) -> ScanOptions:
    """The options with what the bench of ``--bench`` adds: factor, wavelength, glass, source."""
    from dataclasses import replace

    if bench is None:
        if source is not None:
            raise UsageError(
                "a source is known only with its bench",
                where="--source",
                mend="add --bench FILE, or leave the source out",
            )
        return options
    from bench.cli.benchfile import open_bench

    spec = open_bench(bench)
    band = None
    if source is not None:
        named = {entry.name: entry for entry in spec.sources}
        if source not in named:
            raise UsageError(
                f"there is no source {source!r} on this bench",
                where="--source",
                why="the bench has " + ", ".join(repr(name) for name in named),
                mend="give the name of one of them, or leave the option out",
            )
        band = named[source].band
    return replace(
        options,
        opd_per_m=spec.opd_per_m,
        at_wavelength_m=spec.reference_wavelength_m,
        material=options.material or spec.glass,
        band=band,
        dark=spec.detector.dark,
        range=spec.detector.range,
        signal_unit=spec.detector.unit,
    )


def _bad_rows_text(scan_file: ScanFile) -> str:
    rows = scan_file.bad_rows
    shown = ", ".join(str(row) for row in rows[:8]) + (", ..." if len(rows) > 8 else "")
    name = printable(scan_file.path)
    if len(rows) == 1:
        return f"{name}: 1 bad row left out (line {shown})"
    return f"{name}: {len(rows)} bad rows left out (lines {shown})"


def _ignored_unit_text(scan_file: ScanFile) -> str:
    unit = printable(scan_file.ignored_unit, 20)
    return f"{printable(scan_file.path)}: its positions are in {unit}; --position-unit is not used"


# --- for programs --------------------------------------------------------------------------------


def _scaled(estimate: Estimate | None, scale: float, unit: str) -> dict[str, Any] | None:
    if estimate is None:
        return None
    return quantity(estimate.value * scale, unit, estimate.standard_uncertainty * scale)


def _present(document: dict[str, Any]) -> dict[str, Any]:
    return {key: value for key, value in document.items() if value is not None}


def fit_document(scan_file: ScanFile, located: Located) -> dict[str, Any]:
    """Schema ``evenarm.fit/1``: what does not apply is absent."""
    axis = 1e6 if scan_file.unit == "um" else 1.0
    light = scan_file.signal_unit
    document: dict[str, Any] = {
        "schema": "evenarm.fit/1",
        "file": printable(scan_file.path, 4000),
        "found": located.found,
        "axis": scan_file.axis,
    }
    if not located.found:
        document["reason"] = located.reason
        document["weakest_contrast"] = located.weakest_contrast
    else:
        document |= {
            "zero": _scaled(located.zero, axis, scan_file.unit),
            "at_wavelength": _scaled(located.at_wavelength_m, 1e9, "nm"),
            "fringe_zero": _fringe_document(scan_file, located, axis),
            "contrast": _scaled(located.contrast, 1.0, ""),
            "amplitude": _scaled(located.amplitude, 1.0, light),
            "mean_wavelength": _scaled(located.mean_wavelength_m, 1e9, "nm"),
            "coherence_length": _coherence_document(located),
            "residual_glass": _glass_document(located),
            "degrees_of_freedom": located.degrees_of_freedom,
        }
    if math.isfinite(located.noise):
        document["noise"] = quantity(located.noise, light)
    if scan_file.position_unit is not None:
        document["position_unit"] = scan_file.position_unit.as_json()
    document["false_alarm_probability"] = located.false_alarm_probability
    document["bad_rows"] = len(scan_file.bad_rows)
    document["warnings"] = [
        {"code": notice.code, "message": _message(notice)} for notice in located.notices
    ]
    return _present(document)


def _message(notice: Notice) -> str:
    """The notice, with the option that would mend it where it is one of this command's."""
    if notice.code != "no-length":
        return notice.message
    return f"{notice.message} (--position-unit and --path-factor say it)"


def _fringe_document(scan_file: ScanFile, located: Located, axis: float) -> dict[str, Any] | None:
    fringe = located.fringe_zero
    if fringe is None:
        return None
    place = _scaled(fringe.x, axis, scan_file.unit) or {}
    return {**place, "kind": fringe.kind, "probability": fringe.probability}


def _coherence_document(located: Located) -> dict[str, Any] | None:
    lengths = located.coherence
    if lengths is None:
        return None
    return _present(
        {
            "rule": _scaled(lengths.rule_m, 1e6, "um"),
            "fwhm": _scaled(lengths.fwhm_m, 1e6, "um"),
            "integral": _scaled(lengths.integral_m, 1e6, "um"),
            "packet_width": _scaled(lengths.packet_width_m, 1e6, "um"),
        }
    )


def _glass_document(located: Located) -> dict[str, Any] | None:
    glass = located.residual_glass
    if glass is None:
        return None
    return _present(
        {
            "material": glass.material,
            "thickness": _scaled(glass.thickness_m, 1e3, "mm"),
            "dispersion": _scaled(glass.dispersion_fs2, 1.0, "fs^2"),
        }
    )


# --- for people ----------------------------------------------------------------------------------


def fit_lines(scan_file: ScanFile, located: Located) -> list[str]:
    """One block for a file: its name, then a line for each thing found."""
    from bench.quantities import show

    rows: list[tuple[str, str]] = []

    def put(label: str, estimate: Estimate | None, scale: float, unit: str, more: str = "") -> None:
        if estimate is not None:
            value, u = estimate.value * scale, estimate.standard_uncertainty * scale
            uncertain = u if math.isfinite(u) and u > 0.0 else None
            rows.append((label, show(value, uncertain, unit).strip() + more))

    axis, unit = (1e6, "um") if scan_file.unit == "um" else (1.0, "counts")
    light = scan_file.signal_unit
    if not located.found:
        rows.append(("no zero", located.reason))
        if located.weakest_contrast is not None:
            rows.append(("would have seen", f"contrast {located.weakest_contrast:.2g} and more"))
    else:
        what = "OPD" if scan_file.axis == "opd" else "position"
        put("zero", located.zero, axis, unit, f"  {what}, group zero")
        share = _share_text(scan_file.position_unit)
        if share:
            rows.append(("", share))
        put("at wavelength", located.at_wavelength_m, 1e9, "nm")
        if located.fringe_zero is not None:
            fringe = located.fringe_zero
            sure = _chance_text(fringe.probability)
            told = f"  {fringe.kind}; that it is the one nearest to the zero: {sure}"
            put("fringe zero", fringe.x, axis, unit, told)
        put("contrast", located.contrast, 1.0, "")
        put("amplitude", located.amplitude, 1.0, light)
        put("mean wavelength", located.mean_wavelength_m, 1e9, "nm")
        lengths = located.coherence
        if lengths is not None:
            put("coherence rule", lengths.rule_m, 1e6, "um", "  of OPD")
            put("coherence fwhm", lengths.fwhm_m, 1e6, "um", "  of OPD")
            put("coherence integral", lengths.integral_m, 1e6, "um", "  of OPD")
            put("packet width", lengths.packet_width_m, 1e6, "um", "  of OPD")
        glass = located.residual_glass
        if glass is not None:
            put("residual glass", glass.thickness_m, 1e3, "mm", f"  {glass.material}, more in A")
            put("dispersion", glass.dispersion_fs2, 1.0, "fs^2")
    if math.isfinite(located.noise):
        rows.append(("noise", f"{located.noise:.3g} {light}".strip() + "  of one reading"))
    if located.found:
        alarm = _alarm_text(located.false_alarm_probability)
        rows.append(("false alarm", f"chance that noise alone looks like this: {alarm}"))
    rows += [(f"warning {note_.code}", _message(note_)) for note_ in located.notices]
    width = max(len(label) for label, _ in rows)
    name = printable(scan_file.path)
    return [name, *(f"  {label:<{width}}  {printable(text, 200)}" for label, text in rows)]


def _share_text(count: Quantity | None) -> str:
    """What of the position unit's uncertainty the zero's does not carry, and why."""
    if count is None or not count.standard_uncertainty:
        return ""
    percent = 100.0 * count.standard_uncertainty / count.value
    return f"without the {percent:.2g} % of the position unit, which moves all positions alike"


def _chance_text(probability: float) -> str:
    return "certain" if probability >= 0.995 else f"{100.0 * probability:.0f} %"


def _alarm_text(probability: float) -> str:
    if not math.isfinite(probability):
        return "not known"
    if probability >= 0.01:
        return f"at most {100.0 * probability:.2g} %"
    return f"below 1 in {float(f'{1.0 / max(probability, 1e-12):.2g}'):.0f}"
