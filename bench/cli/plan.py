"""``evenarm plan``: what will be scanned, with which source, for how long, and with what odds."""

from __future__ import annotations

import math
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from bench.cli.output import EXIT_DONE, EXIT_NEGATIVE, emit_json, quantity, report_error
from bench.errors import EvenarmError, UsageError, printable

if TYPE_CHECKING:
    from bench.planning.belief import Belief
    from bench.planning.model import BenchFacts, Leg, Plan
    from bench.procedure.facts import Excluded
    from bench.spec.model import BenchSpec

__all__ = ["command", "duration_text", "narrowing_lines", "plan_document", "plan_lines"]

_WIDTH = 80
_NARROWEST = 60
_MOST_SHOWN = 8


def command(
    bench: Annotated[
        Path | None, typer.Option("--bench", help="The bench description to plan for.")
    ] = None,
    source: Annotated[
        str | None, typer.Option("--source", help="The source that is in use now.")
    ] = None,
    as_json: Annotated[bool, typer.Option("--json", help="One JSON document.")] = False,
) -> None:
    """The search plan, its cost and its odds. Moves nothing."""
    from bench.cli.benchfile import open_bench
    from bench.planning import plan_search
    from bench.procedure.facts import belief_from, bench_facts, excluded_sources

    try:
        spec = open_bench(bench)
        if source is not None and source not in {entry.name for entry in spec.sources}:
            raise UsageError(
                f"there is no source {source!r} on this bench",
                where="--source",
                why="the bench has " + ", ".join(repr(entry.name) for entry in spec.sources),
                mend="give the name of one of them, or leave the option out",
            )
        facts, belief = bench_facts(spec), belief_from(spec)
        excluded = excluded_sources(spec)
    except EvenarmError as error:
        raise typer.Exit(report_error(error, as_json=as_json)) from None
    plan = plan_search(facts, belief, source)
    if as_json:
        emit_json(plan_document(plan))
    else:
        import shutil

        width = max(_NARROWEST, min(_WIDTH, shutil.get_terminal_size((_WIDTH, 24)).columns))
        for line in plan_lines(spec, facts, belief, plan, excluded, width):
            typer.echo(line)
    raise typer.Exit(EXIT_DONE if plan.legs else EXIT_NEGATIVE)


# --- for programs --------------------------------------------------------------------------------


def plan_document(plan: Plan) -> dict[str, Any]:
    """The plan as schema ``evenarm.plan/1``; lengths in um of stage reading."""
    compared = {"lower bound": _seconds(plan.lower_bound_time_s)}
    if plan.white_only_time_s is not None:
        compared = {"white light only": _seconds(plan.white_only_time_s), **compared}
    return {
        "schema": "evenarm.plan/1",
        "legs": [_leg_document(leg) for leg in plan.legs],
        "expected_time": _seconds(plan.expected_time_s),
        "worst_time": _seconds(plan.worst_time_s),
        "miss_probability": plan.miss_probability,
        "compared": compared,
    }


def _seconds(time_s: float) -> dict[str, Any]:
    return quantity(time_s, "s")


def _leg_document(leg: Leg) -> dict[str, Any]:
    pace = (
        {"speed": quantity(leg.speed_m_s * 1e6, "um/s")}
        if leg.speed_m_s is not None
        else {"increment": quantity((leg.increment_m or math.nan) * 1e6, "um")}
    )
    return {
        "source": leg.source,
        "mode": leg.mode,
        "purpose": leg.purpose,
        "from": quantity(leg.start_m * 1e6, "um"),
        "to": quantity(leg.stop_m * 1e6, "um"),
        **pace,
        "readings": leg.readings,
        "expected_time": _seconds(leg.expected_time_s),
        "half_width_after": quantity(leg.half_width_after_m * 1e6, "um"),
        "detection_probability": leg.detection_probability,
        "why": leg.why,
    }


# --- for people ----------------------------------------------------------------------------------


def plan_lines(
    spec: BenchSpec,
    facts: BenchFacts,
    belief: Belief,
    plan: Plan,
    excluded: tuple[Excluded, ...] = (),
    width: int = _WIDTH,
) -> list[str]:
    """The plan as text of at most ``width`` columns, of which there must be 60 or more.

    Names from files are made printable.
    """
    from bench.planning.wording import length_text

    low, high = (end * 1e3 for end in belief.interval(0.95))
    lines = [f"Plan for {printable(spec.name, 60)}"]
    said = f"The zero is expected from {low:.3f} to {high:.3f} mm (95 %), of stage reading."
    lines += [*_wrapped(said, width), ""]
    if not plan.legs:
        reason = "No plan: "
        if belief.probability(*facts.travel_m) < 0.5:
            reason += "the zero is expected outside the travel limits of the stage."
        else:
            reason += "none of the sources would show its fringes above the noise."
        return lines + _wrapped(reason, width) + _excluded_lines(excluded, width)
    lines += _table(plan, length_text, width)
    told = [
        "",
        f"expected     {duration_text(plan.expected_time_s)}",
        f"at worst     {duration_text(plan.worst_time_s)}  (every leg, nothing twice)",
        f"missed       chance of missing it: {_one_in(plan.miss_probability)}",
    ]
    shortest = printable(plan.legs[-1].source, 24)
    if plan.white_only_time_s is not None:
        same = abs(plan.white_only_time_s - plan.expected_time_s) < 0.005 * plan.expected_time_s
        told.append(
            f"compared     {duration_text(plan.white_only_time_s)} with {shortest} alone"
            + (", which is this plan" if same else "")
        )
    told.append(
        f"lower bound  {duration_text(plan.lower_bound_time_s)}: straight to the zero and one final"
        " scan; no plan can"
    )
    lines += [line for text in told for line in _wrapped(text, width, 13) or [""]]
    lines += ["", *narrowing_lines(belief.half_width_m, plan, length_text, width)]
    return lines + _excluded_lines(excluded, width)


def _one_in(probability: float) -> str:
    if not probability > 0.0:
        return "none"
    if probability >= 0.1:
        return f"{100.0 * probability:.0f} %"
    return f"1 in {float(f'{1.0 / probability:.3g}'):.0f}"


def _excluded_lines(excluded: tuple[Excluded, ...], width: int) -> list[str]:
    lines: list[str] = []
    for entry in excluded:
        lines += ["", *_wrapped(f"Not used: {printable(entry.name, 40)}: {entry.reason}.", width)]
    return lines


def _table(plan: Plan, length_text: Any, width: int) -> list[str]:
    narrow = width < _WIDTH  # no room for the mode, the readings and what comes of it

    def row(number: str, *cells: str) -> str:
        source, mode, place, pace, readings, time, then = cells
        shown = f"{number:>2} {source:<14}" + ("" if narrow else f"{mode:<6}")
        shown += f"{place} {pace:>10}" + ("" if narrow else f"{readings:>9}")
        return f"{shown}{time:>9}" + ("" if narrow else f"{then:>8}")

    places = f"{'from':>10}{'to':>10}"
    lines = [row("", "source", "mode", places, "pace", "readings", "time", "then ±")]
    lines.append(row("", "", "", f"{'mm':>10}{'mm':>10}", "", "", "", "").rstrip())
    searches = [
        leg for leg in plan.legs if leg.purpose == "search" and leg.source == plan.legs[0].source
    ]
    hidden = max(0, len(plan.legs) - _MOST_SHOWN)
    last_why = ""
    for number, leg in enumerate(plan.legs, start=1):
        # Of a long row of like segments the middle is left out.
        if hidden and 3 < number <= 3 + hidden and leg in searches:
            if number == 3 + hidden:
                middle = plan.legs[3:number]
                total = duration_text(sum(item.expected_time_s for item in middle))
                lines.append(f"   ... {hidden} more such parts, {total} in all ...")
            continue
        pace = (
            f"{length_text(leg.speed_m_s)}/s"
            if leg.speed_m_s is not None
            else f"{length_text(leg.increment_m)}"
        )
        place = f"{leg.start_m * 1e3:>10.4f}{leg.stop_m * 1e3:>10.4f}"
        if searches and leg not in searches:
            # Where the packet will be found is not known yet.
            half = length_text(abs(leg.stop_m - leg.start_m) / 2.0)
            place = f"{'found ± ' + half:>20}"
        lines.append(
            row(
                str(number),
                printable(leg.source, 13),
                leg.mode,
                place,
                pace,
                str(leg.readings),
                duration_text(leg.expected_time_s),
                length_text(leg.half_width_after_m),
            )
        )
        if leg.why != last_why:
            lines += [f"     {text}" for text in _wrapped(printable(leg.why), width - 5)]
            last_why = leg.why
    return lines


def duration_text(time_s: float) -> str:
    """``0.4 s``, ``12 s``, ``1 min 20 s``, ``2 h 05 min``."""
    if time_s < 9.95:
        return f"{time_s:.1f} s"
    seconds = round(time_s)
    if seconds < 60:
        return f"{seconds} s"
    if seconds < 3600:
        return f"{seconds // 60} min {seconds % 60:02d} s"
    minutes = round(time_s / 60.0)
    return f"{minutes // 60} h {minutes % 60:02d} min"


def _wrapped(text: str, width: int, indent: int = 0) -> list[str]:
    import textwrap

    if len(text) <= width:  # blanks stay, as they line up columns
        return [text]
    first, rest = text[:indent], text[indent:]
    return textwrap.wrap(rest, width, initial_indent=first, subsequent_indent=" " * indent)


def narrowing_lines(
    prior_half_width_m: float, plan: Plan, length_text: Any, width: int = _WIDTH
) -> list[str]:
    """A picture of the narrowing: how far the zero may be, before and after, a bar a stage.

    One column of the bar is a quarter of a decade; the shortest bar is one column.
    """
    rows = [("before", prior_half_width_m)]
    for leg in plan.legs:
        label = f"{leg.purpose}, {printable(leg.source, 14)}"
        # A search in several parts narrows once, whichever part finds the packet; the second of two
        # independent zeros leaves their mean.
        if leg.purpose == "verify":
            rows.append((label, leg.half_width_after_m / math.sqrt(2.0)))
        elif rows[-1] != (label, leg.half_width_after_m):
            rows.append((label, leg.half_width_after_m))
    floor = min(half_m for _, half_m in rows)
    lines = ["How far the zero may be (± 95 %), if each scan finds it:"]
    for label, half_m in rows:
        bar = "#" * (1 + round(4.0 * math.log10(half_m / floor)))
        lines.append(f"  {label:<23} {length_text(half_m):>8}  {bar[: width - 36]}")
    return lines
