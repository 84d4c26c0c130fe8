"""The parts of the Run screen as pure functions: a scene and a size in, styled text out.

Every screen answers three questions at a glance: where is the zero and how sure are we, what is the
bench doing, what do I do next.
"""

from __future__ import annotations

import math
import textwrap
from collections.abc import Sequence

from rich.cells import cell_len, set_cell_size
from rich.text import Text

from bench.errors import printable
from bench.tui import letters
from bench.tui.figures import clock, level, position, round_length
from bench.tui.glyphs import Glyphs
from bench.tui.ruler import ruler
from bench.tui.scene import OUTCOME_WORDS, Scene

__all__ = [
    "bench_text",
    "foot_text",
    "head_text",
    "next_text",
    "question_hint",
    "question_lines",
    "steps_text",
    "title_row",
    "zero_text",
]

_AFTERWARDS = {
    "accepted": "The arms are even. Leave the stage as it is.",
    "rejected": "Read the reason, mend it and run again.",
    "not found": "Look at the light and the overlap, or widen [expect] in bench.toml.",
    "stopped": "Look where the stage stands before you go on.",
    "fault": "Mend what is named here before you run again.",
}


def fitted(words: str, width: int, glyphs: Glyphs) -> str:
    """``words`` in exactly ``width`` columns, with a mark where something was cut off."""
    words = glyphs.text(printable(words, 2000))
    if cell_len(words) > width > 1:
        return set_cell_size(words, width - 1) + glyphs.text("…")
    return set_cell_size(words, max(width, 0))


def title_row(title: str, width: int, scene: Scene, aside: str = "") -> Text:
    """The heading of a part: its name, a remark, and a line to the edge."""
    glyphs, palette = scene.glyphs, scene.palette
    row = Text(glyphs.text(f"{title} "), style=f"bold {palette.text}")
    room = width - cell_len(row.plain)
    remark = glyphs.text(printable(aside))
    if remark and cell_len(remark) < room:
        row.append(f"{remark} ", style=palette.quiet)
        room -= cell_len(remark) + 1
    row.append(glyphs.rule * max(0, room), style=palette.quiet)
    return row


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
    right = f"journal {printable(view.head[:8])}   {times} " if view.head else f"{times} "
    banner = " SIMULATED " if view.simulated else ""
    room = width - cell_len(right) - len(banner) - 3
    if cell_len(names) > room:  # the journal's head gives way first
        right = f"{times} "
        room = width - cell_len(right) - len(banner) - 3
    row = Text(" ", style=palette.text)
    row.append(fitted(names, min(cell_len(names), max(room, 0)), glyphs), style="bold")
    row.append(" ")
    if banner:
        row.append(banner, style=f"bold {palette.background} on {palette.warn}")
    row.append(" " * max(0, width - cell_len(row.plain) - cell_len(right)))
    row.append(right, style=palette.quiet)
    row.truncate(width)
    return row


def _what_next(scene: Scene) -> tuple[str, str, str]:
    """A word for across the room, the instruction, and a remark below it."""
    view = scene.view
    asked = scene.question
    if scene.phase == "leaving":
        return "LEAVE?", "Y: stop the run and leave.  N: stay.", "The run goes on until you answer."
    if scene.phase == "not begun":
        return "STOPPED", "Nothing was begun. Q leaves.", ""
    if scene.phase == "stopping":
        return "STOPPING", "Software stop asked. Wait until the stage is at rest.", ""
    if scene.phase == "ready":
        return "START", "Press Enter to begin the run.", scene.note
    if asked is not None and scene.phase == "ask":
        if asked.kind == "acknowledge":
            return "READ", "Read it all, type your name, press Enter.", scene.note
        return "ANSWER", "Y: yes.  N: no.", scene.note
    return "WAIT", view.next_action or "Nothing to do: the bench is at work.", ""


def _left_at(scene: Scene) -> str:
    view = scene.view
    if view.stage_position_m is None or not view.stage_known:
        return "stage position UNKNOWN"
    return f"stage left at {position(view.stage_position_m)}"


def _residual(scene: Scene) -> str:
    from bench.quantities import show_length

    view = scene.view
    if view.residual_opd_m is None:
        return "residual OPD not measured"
    shown = show_length(view.residual_opd_m, view.residual_opd_standard_uncertainty_m)
    return f"residual OPD {shown}"


def _bar(word: str, beside: Sequence[str], width: int, style: str, glyphs: Glyphs) -> list[Text]:
    """Four rows: a large word, clear of the edges, and up to four lines beside it."""
    drawn = [*letters.large(word, max(1, width - 2), glyphs, lower=True), ""]
    start = max(cell_len(row) for row in drawn) + 4
    rows = []
    for left, words in zip(drawn, [*beside, "", "", "", ""], strict=False):
        row = Text(f" {set_cell_size(left, start - 1)}", style=f"bold {style}")
        row.append(fitted(words, max(0, width - start), glyphs))
        row.truncate(width, pad=True)
        rows.append(row)
    return rows


def next_text(scene: Scene, width: int) -> Text:
    """What to do next: four rows, and up to three more with the reason once a run is over."""
    palette, glyphs, view = scene.palette, scene.glyphs, scene.view
    calm = f"{palette.calm_text} on {palette.calm_bar}"
    if scene.phase == "done":
        outcome = view.outcome or "fault"
        colour = {"accepted": palette.good, "stopped": palette.warn}.get(outcome, palette.bad)
        style = f"{palette.background} on {colour}"
        word = OUTCOME_WORDS.get(outcome, glyphs.text(printable(outcome, 20)).upper())
        facts = ["", _residual(scene), _left_at(scene), "Q leaves."]
        rows = _bar(word, facts, width, style, glyphs)
        advice = " ".join(filter(None, (view.next_action or _AFTERWARDS.get(outcome, ""),)))
        words = [f"Reason: {printable(view.reason)}"] if view.reason else []
        for line in [*words, f"Next: {advice}"] if advice else words:
            wrapped = textwrap.wrap(glyphs.text(line), max(10, width - 2))[:2]
            for part in wrapped:
                row = Text(f" {part}", style=calm)
                row.truncate(width, pad=True)
                rows.append(row)
        return Text("\n").join(rows)
    word, instruction, remark = _what_next(scene)
    act = scene.phase in ("ready", "ask", "leaving")
    style = f"{palette.act_text} on {palette.act_bar}" if act else calm
    if scene.phase in ("stopping", "not begun"):
        style = f"{palette.background} on {palette.warn}"
    start = letters.large_width(word, glyphs) + 4
    lines = textwrap.wrap(glyphs.text(printable(instruction)), max(10, width - start))[:3]
    lines += [remark] if remark else []
    if len(lines) < 4:
        lines.insert(0, "")
    return Text("\n").join(_bar(word, lines, width, style, glyphs))


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
    for step in scene.view.steps:
        mark, style = marks[step.state]
        if step.state in ("now", "failed"):
            here = len(rows)
        row = Text(f"{mark} ", style=style)
        row.append(fitted(step.title, width - cell_len(mark) - 1, glyphs))
        rows.append(row)
        if step.detail and step.state in ("now", "failed"):
            indent = " " * (cell_len(mark) + 1)
            detail = glyphs.text(printable(step.detail))
            for part in textwrap.wrap(detail, max(8, width - len(indent)))[:2]:
                rows.append(Text(indent + part, style=palette.quiet))
    room = max(0, height - 1)
    if len(rows) > room > 0:
        first = max(0, min(here - room // 2, len(rows) - room))
        below = len(rows) - first - room
        rows = rows[first : first + room]
        if below:
            rows[-1] = Text(f"{glyphs.down} {below + 1} more", style=palette.quiet)
    return Text("\n").join([title_row("STEPS", width, scene), *rows])


def bench_text(scene: Scene, width: int) -> Text:
    """What the bench is doing, where the stage is, and what the detector sees."""
    view, glyphs, palette = scene.view, scene.glyphs, scene.palette
    rows = [title_row("BENCH", width, scene)]
    doing = view.doing or ("idle" if not view.stage_moving else "moving")
    wrapped = [*textwrap.wrap(glyphs.text(printable(doing)), max(8, width))[:2], ""][:2]
    wrapped = [row for row in wrapped if row or not scene.finished]
    rows += [Text(fitted(row, width, glyphs).rstrip(), style=palette.text) for row in wrapped]
    if view.progress is not None and not scene.finished:
        share = f" {100 * max(0.0, min(1.0, view.progress)):3.0f} %"
        bar = _filled(view.progress, width - len(share), glyphs)
        rows.append(Text(bar + share, style=palette.signal))
    elif not scene.finished:  # so that nothing jumps while a run goes on
        rows.append(Text(""))

    def line(label: str, words: str, style: str) -> None:
        row = Text(f"{label:<9}", style=palette.quiet)
        row.append(fitted(words, width - 9, glyphs).rstrip(), style=style)
        rows.append(row)

    if not view.stage_known or view.stage_position_m is None:
        line("stage", "UNKNOWN", f"bold {palette.bad}")
        line("", "MOVING" if view.stage_moving else "", f"bold {palette.warn}")
    else:
        line("stage", position(view.stage_position_m), f"bold {palette.text}")
        moving = view.stage_moving
        line(
            "",
            "MOVING" if moving else "at rest",
            f"bold {palette.warn if moving else palette.text}",
        )
    line("source", view.source or "none yet", palette.text)
    if view.detector_level is None:
        line("detector", "no reading yet", palette.quiet)
    elif view.detector_saturated:
        line("detector", "SATURATED", f"bold {palette.bad}")
    else:
        line("detector", level(view.detector_level, view.detector_unit), palette.text)
    return Text("\n").join(rows)


def _sureness(scene: Scene, width: int) -> Text:
    """The 95 % interval, in stage reading and in OPD, each with its name."""
    view, palette, glyphs = scene.view, scene.palette, scene.glyphs
    half = view.half_width_m
    if half is None or not math.isfinite(half):
        return Text(fitted("how sure: not known", width, glyphs), style=palette.quiet)
    row = Text(style=palette.quiet)
    for amount, axis in ((half, "stage"), (half * abs(view.opd_per_m), "OPD")):
        row.append(glyphs.text(f"± {round_length(amount)}"), style=f"bold {palette.text}")
        row.append(f" {axis}    ")
    row.append("95 %")
    if view.accept_residual_opd_m is not None:
        row.append(f"    {glyphs.goal} goal")
    row.truncate(width)
    return row


def zero_text(scene: Scene, width: int, *, compact: bool = False) -> Text:
    """Where the zero is and how sure we are: large figures, both +-, and the narrowing ruler."""
    from bench.quantities import show

    view, palette, glyphs = scene.view, scene.palette, scene.glyphs
    if scene.measured and view.zero_m is not None:
        aside = "stage reading, measured"
        u_m = view.zero_standard_uncertainty_m
        number, unit = show(view.zero_m * 1e3, (u_m or 0.0) * 1e3, "mm").rsplit(" ", 1)
    elif view.zero_m is not None:
        aside = "stage reading, only expected so far"
        number, unit = f"{view.zero_m * 1e3:.3f}".rstrip("0").rstrip("."), "mm"
        half = view.half_width_m
        if half is not None and math.isfinite(half) and not compact:
            digits = max(0, min(6, 1 - math.floor(math.log10(max(half * 1e3, 1e-9)))))
            number = f"{view.zero_m * 1e3:.{digits}f} ± {half * 1e3:.{digits}f}"
    else:
        aside, number, unit = "stage reading", "?", ""
    style = f"bold {palette.zero if scene.measured else palette.text}"
    rows = [title_row("ZERO", width, scene, aside)]
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


def question_lines(scene: Scene, width: int) -> list[str]:
    """The words of the open question, wrapped; paragraphs begin with a mark."""
    asked = scene.question
    if asked is None:
        return []
    rows: list[str] = []
    for line in asked.lines:
        words = scene.glyphs.text(printable(line, 2000))
        wrapped = textwrap.wrap(words, max(10, width - 2)) or [""]
        mark = scene.glyphs.text("·")
        rows += [f"{mark if index == 0 else ' '} {part}" for index, part in enumerate(wrapped)]
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
    """The stop key first and always; then at most four short hints."""
    palette, glyphs = scene.palette, scene.glyphs
    row = Text(style=palette.quiet)
    row.append(" F8 SOFTWARE STOP ", style=f"bold {palette.stop_text} on {palette.stop_bar}")
    row.append(" or Ctrl+C ", style=palette.text)
    hints = []
    if scene.phase == "ready":
        hints.append(("Enter", "start"))
    if scene.question is not None and scene.phase == "ask":
        hints.append((f"{glyphs.up}{' ' if not glyphs.braille else ''}{glyphs.down}", "scroll"))
    typing = scene.question is not None and scene.question.kind == "acknowledge"
    hints += [("F4", "colours"), ("Ctrl+Q" if typing else "Q", "leave")]
    for key, what in hints:
        row.append("  ")
        row.append(key, style=f"bold {palette.text}")
        row.append(f" {what}")
    row.truncate(width, pad=True)
    return row
