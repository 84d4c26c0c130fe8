"""What to do next, and how a run ended: the panel that is read from across the room."""

from __future__ import annotations

from collections.abc import Sequence

from rich.cells import cell_len, set_cell_size
from rich.text import Text

from bench.errors import printable
from bench.tui import letters
from bench.tui.figures import position
from bench.tui.glyphs import Glyphs
from bench.tui.scene import OUTCOME_WORDS, Scene
from bench.tui.words import fitted, wrapped

__all__ = ["end_rows", "next_text", "reading"]

BAR_ROWS = 4
HEAD_DIGITS = 16
"""As many digits of the journal's head as a later check of the journal asks for."""

_AFTERWARDS = {
    "accepted": "The arms are even. Leave the stage as it is.",
    "rejected": "Read the reason and mend it; a new run starts from the shell.",
    "not found": "Look at the light and the overlap, or widen [expect] in bench.toml.",
    "stopped": "Look where the stage stands before you go on.",
    "fault": "Mend what is named here; a new run starts from the shell.",
}


def reading(scene: Scene) -> str:
    """Where the stage stands, or what it read last where the run does not rely on that."""
    view = scene.view
    if view.stage_position_m is None:
        return "stage position UNKNOWN"
    if not view.position_trusted or not view.stage_known or not view.at_rest:
        return f"last reading {position(view.stage_position_m)}, not trusted"
    return f"stage left at {position(view.stage_position_m)}"


def _residual(scene: Scene) -> str:
    from bench.quantities import show_length

    view = scene.view
    if view.residual_opd_m is None:
        return "residual OPD not measured"
    shown = show_length(view.residual_opd_m, view.residual_opd_standard_uncertainty_m)
    return f"residual OPD {shown}"


def _what_next(scene: Scene) -> tuple[str, str, str]:
    """A word for across the room, the instruction, and a remark below it."""
    view = scene.view
    asked = scene.question
    if scene.phase == "leaving":
        remark = scene.note or "The run goes on until you answer."
        return "LEAVE?", "Y: stop the run and leave.  N: stay.", remark
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


def _bar(word: str, beside: Sequence[str], width: int, style: str, glyphs: Glyphs) -> list[Text]:
    """Four rows: a word, clear of the edges, and up to four lines beside it.

    The word is large where that leaves room for the lines, for they must be read whole.
    """
    longest = max((cell_len(glyphs.text(line)) for line in beside), default=0)
    room = width - 2 if letters.large_width(word, glyphs) + 4 + longest <= width else len(word)
    drawn = [*letters.large(word, max(1, room), glyphs, lower=True), ""]
    start = max(cell_len(row) for row in drawn) + 4
    rows = []
    for left, words in zip(drawn, [*beside, "", "", "", ""], strict=False):
        row = Text(f" {set_cell_size(left, start - 1)}", style=f"bold {style}")
        row.append(fitted(words, max(0, width - start), glyphs))
        row.truncate(width, pad=True)
        rows.append(row)
    return rows


def _beside(word: str, texts: Sequence[str], width: int, glyphs: Glyphs) -> list[str]:
    """``texts`` in lines that fit beside ``word``, large where four lines are enough for that."""
    for start in (letters.large_width(word, glyphs) + 4, len(word) + 4):
        lines = [line for text in texts if text for line in wrapped(text, width - start, glyphs)]
        if len(lines) <= BAR_ROWS and width - start >= 16:
            break
    return lines[:BAR_ROWS]


def _told(scene: Scene) -> list[str]:
    """Why a run ended and what comes next, a paragraph each."""
    view = scene.view
    paragraphs = list(view.error_lines)
    if not paragraphs and view.reason:
        paragraphs = [f"Reason: {view.reason}"]
    advice = view.next_action or _AFTERWARDS.get(view.outcome or "", "")
    mends = any(line.startswith("mend:") for line in view.error_lines)
    if advice and not (mends and view.at_rest):
        paragraphs.append(f"Next: {advice}")
    return paragraphs


def end_rows(scene: Scene, width: int) -> list[str]:
    """The words below the outcome, whole; a paragraph that goes on is set in."""
    rows = []
    for paragraph in _told(scene):
        first, *more = wrapped(paragraph, width - 4, scene.glyphs) or [""]
        rows += [first, *(f"  {part}" for part in more)]
    return rows


def _outcome_text(scene: Scene, width: int, most: int | None) -> Text:
    palette, glyphs, view = scene.palette, scene.glyphs, scene.view
    outcome = view.outcome or "fault"
    colour = {"accepted": palette.good, "stopped": palette.warn}.get(outcome, palette.bad)
    word = OUTCOME_WORDS.get(outcome, glyphs.text(printable(outcome, 20)).upper())
    head = f"journal head {printable(view.head[:HEAD_DIGITS])}" if view.head else ""
    leave = "Q leaves." if outcome == "accepted" else "Q leaves; run again from the shell."
    facts = [_residual(scene), reading(scene), head, leave]
    rows = _bar(word, facts, width, f"{palette.background} on {colour}", glyphs)
    told = end_rows(scene, width)
    room = len(told) if most is None else max(1, most - BAR_ROWS)
    if len(told) > room:
        first = max(0, min(scene.scrolled, len(told) - room))
        below = len(told) - first - room > 0
        told = told[first : first + room]
        if below:
            told[-1] = f"{glyphs.down} more below: press {glyphs.down}"
    for part in told:
        row = Text(f" {part}", style=f"{palette.calm_text} on {palette.calm_bar}")
        row.truncate(width, pad=True)
        rows.append(row)
    return Text("\n").join(rows)


def next_text(scene: Scene, width: int, most: int | None = None) -> Text:
    """What to do next in four rows; once a run is over, with the whole reason below them.

    Where ``most`` rows cannot hold it all, ``scene.scrolled`` says where to begin.
    """
    palette, glyphs = scene.palette, scene.glyphs
    if scene.phase == "done":
        return _outcome_text(scene, width, most)
    word, instruction, remark = _what_next(scene)
    act = scene.phase in ("ready", "ask", "leaving")
    style = f"{palette.calm_text} on {palette.calm_bar}"
    if act:
        style = f"{palette.act_text} on {palette.act_bar}"
    if scene.phase in ("stopping", "not begun"):
        style = f"{palette.background} on {palette.warn}"
    lines = _beside(word, (instruction, remark), width, glyphs)
    if len(lines) < BAR_ROWS:
        lines.insert(0, "")
    return Text("\n").join(_bar(word, lines, width, style, glyphs))
