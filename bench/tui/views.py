"""The parts of the Run screen as pure functions: a scene and a size in, styled text out.

Every screen answers three questions at a glance: where is the zero and how sure are we, what is the
bench doing, what do I do next.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from rich.cells import cell_len
from rich.text import Text

from bench.errors import printable
from bench.tui import letters
from bench.tui.figures import clock, level, position, round_length
from bench.tui.glyphs import Glyphs
from bench.tui.ruler import ruler
from bench.tui.scene import Scene
from bench.tui.words import first_that_fits, fitted, title_row, wrapped

if TYPE_CHECKING:
    from bench.procedure.live import Question

__all__ = [
    "bench_text",
    "foot_text",
    "head_text",
    "question_hint",
    "question_lines",
    "steps_text",
    "zero_text",
]


def _filled(share: float, width: int, glyphs: Glyphs) -> str:
    full = round(max(0.0, min(1.0, share)) * width) if math.isfinite(share) else 0
    return glyphs.bar_full * full + glyphs.bar_empty * (width - full)


def head_text(scene: Scene, width: int) -> Text:
    """One row: bench, procedure, whether it is simulated, journal, time gone and left."""
    view, glyphs, palette = scene.view, scene.glyphs, scene.palette
    times = f"{clock(view.elapsed_s)} gone"
    if view.remaining_s is not None and not scene.finished:
        times += f", ~{clock(view.remaining_s)} left"
    names = glyphs.text(f"{printable(view.bench_name, 80)} · {printable(view.procedure, 80)}")
    banner = " SIMULATED " if view.simulated else ""
    for digits in (16, 8, 0):  # the journal's head gives way first
        head = printable(view.head[:digits])
        right = f"journal {head}   {times} " if head else f"{times} "
        room = width - cell_len(right) - len(banner) - 3
        if cell_len(names) <= room:
            break
    row = Text(" ", style=palette.text)
    row.append(fitted(names, min(cell_len(names), max(room, 0)), glyphs), style="bold")
    row.append(" ")
    if banner:
        row.append(banner, style=f"bold {palette.background} on {palette.warn}")
    row.append(" " * max(0, width - cell_len(row.plain) - cell_len(right)))
    row.append(right, style=palette.quiet)
    row.truncate(width)
    return row


def steps_text(scene: Scene, width: int, height: int) -> Text:
    """The steps, one a row, and details of the one where the run is."""
    glyphs, palette = scene.glyphs, scene.palette
    marks = {
        "open": (glyphs.step_open, palette.quiet),
        "now": (glyphs.step_now, f"bold {palette.text}"),
        "done": (glyphs.step_done, palette.good),
        "failed": (glyphs.step_failed, f"bold {palette.bad}"),
    }
    rows: list[Text] = []
    here = 0
    room = max(0, height - 1)
    for step in scene.view.steps:
        mark, style = marks[step.state]
        row = Text(f"{mark} ", style=style)
        row.append(fitted(step.title, width - cell_len(mark) - 1, glyphs))
        rows.append(row)
        if step.state in ("now", "failed"):
            here = len(rows) - 1
            indent = " " * (cell_len(mark) + 1)
            most = max(1, min(8, room - 2))
            detail = wrapped(step.detail, width - len(indent), glyphs, most=most)
            rows += [Text(indent + part, style=palette.quiet) for part in detail]
            last = len(rows) - 1
    if len(rows) > room > 0:
        middle = (here + last) // 2 if here else 0
        first = max(0, min(middle - room // 2, here, len(rows) - room))
        first = max(first, min(here, last + 2 - room)) if here else first
        below = len(rows) - first - room
        rows = rows[first : first + room]
        if below > 0 and room > 2:
            rows[-1] = Text(f"{glyphs.down} {below + 1} more", style=palette.quiet)
    return Text("\n").join([title_row("STEPS", width, scene), *rows])


def bench_text(scene: Scene, width: int) -> Text:
    """What the bench is doing, where the stage is, and what the detector sees."""
    view, glyphs, palette = scene.view, scene.glyphs, scene.palette
    rows = [title_row("BENCH", width, scene)]
    doing = view.doing or ("idle" if not view.stage_moving else "moving")
    most = 2 if width >= 30 else 3
    told = wrapped(doing, width, glyphs, most=most)
    told += [""] * (0 if scene.finished else most - len(told))  # nothing jumps while a run goes on
    rows += [Text(row, style=palette.text) for row in told]
    if view.progress is not None and not scene.finished:
        share = f" {100 * max(0.0, min(1.0, view.progress)):3.0f} %"
        bar = _filled(view.progress, width - len(share), glyphs)
        rows.append(Text(bar + share, style=palette.signal))
    elif not scene.finished:
        rows.append(Text(""))

    def line(label: str, style: str, *variants: str) -> None:
        start = min(9, max(len(label) + 1, width - max(map(cell_len, variants))))
        row = Text(f"{label:<{start}}", style=palette.quiet)
        row.append(first_that_fits(variants, width - start, glyphs), style=style)
        row.truncate(width)
        rows.append(row)

    still = "MOVING" if view.stage_moving else "at rest"
    still = still if view.at_rest else "MAY STILL MOVE"
    moves = view.stage_moving or not view.at_rest
    where_m = view.stage_position_m
    if where_m is None:
        line("stage", f"bold {palette.bad}", "UNKNOWN")
        still = still if moves else ""
    else:
        places = (position(where_m), f"{where_m * 1e3:.3f} mm", round_length(where_m))
        if view.position_trusted and view.stage_known and view.at_rest:
            line("stage", f"bold {palette.text}", *places)
        else:
            line("stage", f"bold {palette.bad}", "NOT TRUSTED")
            line("reads", palette.quiet, *places)
    line("", f"bold {palette.warn if moves else palette.text}", still)
    line("source", palette.text, view.source or "none yet")
    if view.detector_level is None:
        line("detector", palette.quiet, "no reading yet", "none yet")
    elif view.detector_saturated:
        line("detector", f"bold {palette.bad}", "SATURATED")
    else:
        line("detector", palette.text, level(view.detector_level, view.detector_unit))
    return Text("\n").join(rows)


def _sureness(scene: Scene, width: int) -> Text:
    """The 95 % interval, in stage reading and in OPD, each with its name."""
    view, palette, glyphs = scene.view, scene.palette, scene.glyphs
    half = view.half_width_m
    if half is None or not math.isfinite(half):
        words = first_that_fits(("how sure: not known", "not known"), width, glyphs)
        return Text(words, style=palette.quiet)
    stage = f"± {round_length(half)}"
    opd = f"± {round_length(half * abs(view.opd_per_m))}"
    both = f"{stage} stage    {opd} OPD    95 %"
    variants = [both, both.replace("    ", "  "), f"{stage} stage  {opd} OPD", f"{stage} stage"]
    if view.accept_residual_opd_m is not None:
        variants.insert(0, f"{both}    {glyphs.goal} goal")
    row = Text(first_that_fits((*variants, stage), width, glyphs), style=palette.quiet)
    row.highlight_words([glyphs.text(stage), glyphs.text(opd)], f"bold {palette.text}")
    return row


def zero_text(scene: Scene, width: int, *, compact: bool = False) -> Text:
    """Where the zero is and how sure we are: large figures, both +-, and the narrowing ruler."""
    from bench.quantities import show

    view, palette, glyphs = scene.view, scene.palette, scene.glyphs
    asides: tuple[str, ...]
    if scene.measured and view.zero_m is not None:
        asides = ("stage reading, measured", "measured")
        u_m = view.zero_standard_uncertainty_m
        number, unit = show(view.zero_m * 1e3, (u_m or 0.0) * 1e3, "mm").rsplit(" ", 1)
    elif view.zero_m is not None:
        asides = ("stage reading, only expected so far", "only expected", "expected")
        if view.roughly_located:
            asides = ("stage reading, roughly located by a coarse scan", "roughly located", "rough")
        number, unit = f"{view.zero_m * 1e3:.3f}".rstrip("0").rstrip("."), "mm"
        half = view.half_width_m
        if half is not None and math.isfinite(half) and not compact:
            digits = max(0, min(6, 1 - math.floor(math.log10(max(half * 1e3, 1e-9)))))
            number = f"{view.zero_m * 1e3:.{digits}f} ± {half * 1e3:.{digits}f}"
    else:
        asides, number, unit = ("stage reading, not known", "not known"), "?", ""
    style = f"bold {palette.zero if scene.measured else palette.text}"
    rows = [title_row("ZERO", width, scene, *asides)]
    if compact:
        row = Text(glyphs.text(f"{number} {unit}"), style=style)
        row.append("   ")
        row.append_text(_sureness(scene, max(0, width - cell_len(row.plain))))
        row.truncate(width)
        return Text("\n").join([rows[0], row])
    # Where not all of it fits in large figures, the uncertainty follows in small ones.
    head, tail = number, unit
    if letters.large_width(number, glyphs) + len(unit) + 1 > width:
        cut = min((number.find(mark) for mark in "(±" if mark in number), default=len(number))
        head, tail = number[:cut].rstrip(), f"{number[cut:]} {unit}".strip()
    drawn = letters.large(head, width - len(tail) - 1, glyphs)
    if not drawn[0]:  # no large figures here, so nothing is taken apart
        drawn, tail = ["", first_that_fits((f"{number} {unit}",), width, glyphs), ""], ""
    for index, part in enumerate(drawn):
        last = index == (2 if drawn[2] else 1)
        words = glyphs.text(f"{part} {tail}" if last and tail else part)
        rows.append(Text(words[:width], style=style))
    rows.append(_sureness(scene, width))
    widest = view.half_width_start_m
    if widest is not None:
        goal = view.accept_residual_opd_m
        goal_m = None if goal is None or not view.opd_per_m else goal / abs(view.opd_per_m)
        drawn = ruler(view.half_width_m, widest, width, glyphs, goal_m)
        styles = (style, palette.quiet, palette.quiet)
        rows += [Text(row, style=how) for row, how in zip(drawn, styles, strict=False)]
    return Text("\n").join(rows)


def _asks(asked: Question) -> str:
    """The sentence that yes or no answers."""
    if asked.kind != "confirm":
        return ""
    if asked.id == "position":
        return "May the stage be homed now?"
    return "Is it in place?" if asked.id.startswith("source ") else "Is all of this so?"


def question_lines(scene: Scene, width: int) -> list[str]:
    """The words of the open question, wrapped; paragraphs begin with a mark, what is asked ends."""
    asked = scene.question
    if asked is None:
        return []
    rows: list[str] = []
    mark = scene.glyphs.text("·")
    for line in asked.lines:
        told = wrapped(line, max(10, width - 2), scene.glyphs) or [""]
        rows += [f"{mark if index == 0 else ' '} {part}" for index, part in enumerate(told)]
    if asks := _asks(asked):
        keys = "Y: yes.  N: no."
        ends = (
            [f"{asks}  {keys}"]
            if len(asks) + len(keys) + 2 <= width
            else [*wrapped(asks, width, scene.glyphs), keys]
        )
        rows += ["", *ends]
    return rows


def question_hint(scene: Scene, width: int) -> Text:
    """The row below a question: what is missing, else how to see the rest of it."""
    palette, glyphs = scene.palette, scene.glyphs
    if scene.note:
        return Text(fitted(scene.note, width, glyphs), style=f"bold {palette.warn}")
    if scene.more_below:
        return Text(
            fitted(f"{glyphs.down} more below", width, glyphs), style=f"bold {palette.text}"
        )
    return Text(" ", style=palette.text)


def foot_text(scene: Scene, width: int) -> Text:
    """The stop key first and always; then at most five short hints, whole or not at all."""
    palette, glyphs = scene.palette, scene.glyphs
    row = Text(style=palette.quiet)
    row.append(" F8 SOFTWARE STOP ", style=f"bold {palette.stop_text} on {palette.stop_bar}")
    row.append(" or Ctrl+C ", style=palette.text)
    asked = scene.question if scene.phase == "ask" else None
    typing = scene.question is not None and scene.question.kind == "acknowledge"
    # Key, what it does, and which goes first where there is no room for all of them.
    hints = []
    if scene.phase == "ready":
        hints.append(("Enter", "start", 0))
    if scene.phase == "leaving" or (asked is not None and not typing):
        hints += [("Y", "yes", 0), ("N", "no", 0)]
    if asked is not None:
        hints.append((f"{glyphs.up}{' ' if not glyphs.braille else ''}{glyphs.down}", "scroll", 1))
    if not scene.no_colour:
        hints.append(("F4", "colours", 2))
    if scene.phase != "leaving":
        hints.append(("Ctrl+Q" if typing else "Q", "leave", 0))
    for dropped in (3, 2, 1, 0):
        kept = [hint for hint in hints if hint[2] < dropped]
        taken = sum(len(key) + len(what) + 3 for key, what, _ in kept)
        if cell_len(row.plain) + taken <= width:
            break
    for key, what, _ in kept:
        row.append("  ")
        row.append(key, style=f"bold {palette.text}")
        row.append(f" {what}")
    row.truncate(width, pad=True)
    return row
