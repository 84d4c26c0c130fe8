"""The parts of the screen as pure functions: scene in, text out."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from rich.cells import cell_len
from rich.color import Color, ColorSystem
from test_tui_fake import ASKED, BEFORE, FOUND, SCANNING, VIEWS, ZERO_M

from bench.procedure.live import StepView
from bench.tui import figures, letters
from bench.tui.glyphs import ASCII, FULL, glyphs_for
from bench.tui.next_view import end_rows, next_text
from bench.tui.palette import PALETTES, contrast
from bench.tui.ruler import ruler, ruler_place
from bench.tui.scan_view import scan_text
from bench.tui.scene import Scene
from bench.tui.trace import draw, window_of
from bench.tui.views import (
    bench_text,
    foot_text,
    head_text,
    question_lines,
    steps_text,
    zero_text,
)
from bench.tui.words import wrapped


def scene(at: str, **changes: object) -> Scene:
    view = VIEWS[at]
    shown = Scene(
        view, started=at != "before", finished=view.outcome is not None, question=view.question
    )
    return dataclasses.replace(shown, **changes)


def parts(shown: Scene, width: int) -> dict[str, str]:
    return {
        "head": head_text(shown, width).plain,
        "next": next_text(shown, width).plain,
        "steps": steps_text(shown, width, 12).plain,
        "bench": bench_text(shown, width).plain,
        "zero": zero_text(shown, width).plain,
        "compact zero": zero_text(shown, width, compact=True).plain,
        "scan": scan_text(shown, width, 10).plain,
        "foot": foot_text(shown, width).plain,
        "question": "\n".join(question_lines(shown, width)),
    }


# --- colours -------------------------------------------------------------------------------------


def test_contrast_is_the_published_ratio() -> None:
    # WCAG 2.1, definition of contrast ratio: black on white is 21, a colour on itself is 1.
    assert contrast("#000000", "#ffffff") == pytest.approx(21.0)
    assert contrast("#336699", "#336699") == 1.0
    # #767676 on white is the well-known lightest grey above 4.5 (common practice, from memory).
    assert 4.5 < contrast("#767676", "#ffffff") < 4.6
    assert contrast("#777777", "#ffffff") < 4.5


@pytest.mark.parametrize("palette", PALETTES, ids=lambda palette: palette.name)
def test_every_pair_can_be_read(palette) -> None:
    poor = {name: pair for name, pair in palette.pairs().items() if contrast(*pair) < 4.5}
    assert not poor


@pytest.mark.parametrize("palette", PALETTES, ids=lambda palette: palette.name)
def test_every_pair_can_be_told_apart_in_sixteen_colours(palette) -> None:
    for name, pair in palette.pairs().items():
        text, ground = (
            Color.parse(colour).downgrade(ColorSystem.STANDARD).number for colour in pair
        )
        assert text != ground, name


def test_red_leaves_the_dark_adapted_eye_alone() -> None:
    red = next(palette for palette in PALETTES if palette.name == "evenarm-red")
    for pair in red.pairs().values():
        for colour in pair:
            assert colour[3:] == "0000"


# --- figures and letters -------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("length_m", "shown"),
    [
        (24e-9, "24 nm"),
        (1.24e-6, "1.2 um"),
        (5e-3, "5 mm"),
        (999.6e-9, "1 um"),
        (0.31e-9, "0.31 nm"),
        (-24e-9, "-24 nm"),
        (0.0, "0 nm"),
        (12.0, "12 m"),
        (float("nan"), "not known"),
    ],
)
def test_round_lengths(length_m: float, shown: str) -> None:
    assert figures.round_length(length_m) == shown


@given(st.floats(1e-10, 1.0))
def test_round_lengths_are_within_half_of_the_second_digit(length_m: float) -> None:
    number, unit = figures.round_length(length_m).split()
    back = float(number) * {"nm": 1e-9, "um": 1e-6, "mm": 1e-3, "m": 1.0}[unit]
    assert back == pytest.approx(length_m, rel=0.051)


def test_times_and_levels() -> None:
    assert figures.clock(102.9) == "1:42"
    assert figures.clock(3723) == "1:02:03"
    assert figures.clock(-1) == "0:00"
    assert figures.clock(float("inf")) == "?"
    assert figures.level(1.2344, "V") == "1.234 V"
    assert figures.level(15321.4, "") == "15321"
    assert figures.position(13.2184012e-3) == "13.218 40 mm"
    assert figures.position(-0.5e-3) == "-0.500 00 mm"


@given(st.text(alphabet="0123456789.() ±ABCDEFGHIJKLMNOPQRSTUVWXYZ?", max_size=14), st.booleans())
def test_large_letters_take_the_width_they_announce(words: str, lower: bool) -> None:
    rows = letters.large(words, 500, FULL, lower=lower)
    assert len(rows) == letters.ROWS
    assert max(map(len, rows)) <= max(0, letters.large_width(words, FULL))


def test_large_letters_give_way_where_there_is_no_room() -> None:
    assert letters.large("13.218", 8, FULL) == ["", "13.218", ""]
    assert letters.large("13€", 80, FULL) == ["", "13€", ""]
    assert letters.large("WAIT", 80, ASCII) == ["", "W A I T", ""]


@pytest.mark.parametrize(
    ("term", "encoding", "glyphs"),
    [
        ("xterm-256color", "utf-8", FULL),
        ("xterm", "UTF8", FULL),
        ("linux", "utf-8", ASCII),
        ("dumb", "utf-8", ASCII),
        ("xterm", "ascii", ASCII),
        ("xterm", "ISO-8859-1", ASCII),
        ("xterm", None, ASCII),
    ],
)
def test_what_a_terminal_can_show(term: str, encoding: str | None, glyphs) -> None:
    assert glyphs_for({"TERM": term}, encoding) is glyphs


# --- the narrowing ruler -------------------------------------------------------------------------


@given(st.floats(1e-9, 1e-2), st.floats(1e-9, 1e-2), st.integers(20, 120))
def test_the_jaws_close_as_the_zero_narrows(one_m: float, other_m: float, width: int) -> None:
    low, high = sorted((one_m, other_m))
    spans = []
    for half_m in (low, high):
        jaws, scale, labels = ruler(half_m, 1e-2, width, ASCII)
        assert len(jaws) == len(scale) == len(labels) <= width
        middle = len(jaws) // 2
        assert jaws[middle] == "|"
        assert middle - jaws.index("[") == jaws.index("]") - middle
        spans.append(jaws.index("]") - middle)
    assert spans[0] <= spans[1]


def test_the_ruler_is_logarithmic() -> None:
    # six decades from 1 nm to 1 mm over sixty columns: ten columns each
    assert [ruler_place(10.0**k * 1e-9, 1e-3, 60) for k in range(7)] == list(range(0, 61, 10))
    assert ruler_place(1.0, 1e-3, 60) == 60
    assert ruler_place(1e-12, 1e-3, 60) == 0


def test_the_ruler_without_an_interval_shows_no_jaws() -> None:
    jaws, scale, labels = ruler(None, 5e-3, 53, ASCII, 100e-9)
    assert jaws.strip() == "|"
    assert scale.count("^") == 2
    assert labels.split() == ["5", "mm", "1", "um", "1", "nm", "1", "um", "5", "mm"]
    assert ruler(1e-6, 5e-3, 12, ASCII) == []
    assert ruler(1e-6, float("nan"), 53, ASCII) == []


# --- the trace -----------------------------------------------------------------------------------


@pytest.mark.parametrize("braille", [True, False])
def test_one_spike_among_a_million_readings_is_seen(braille: bool) -> None:
    x = np.linspace(0, 1, 1_000_000)
    signal = np.zeros_like(x)
    signal[700_000] = 1.0
    window = window_of(x, signal)
    cells = draw(x, signal, window, 50, 8, braille=braille)
    filled = [row[34] not in " \u2800" for row in cells.rows]
    assert all(filled[1:])  # the top row holds the room above the highest reading


def test_a_straight_line_is_where_it_belongs() -> None:
    x = np.linspace(0, 1, 400)
    cells = draw(x, x, window_of(x, x), 20, 10, braille=False)
    assert cells.rows[0][-1] in "'.:"
    assert cells.rows[-1][0] in "'.:"
    assert cells.rows[0][0] == cells.rows[-1][-1] == " "


def test_bad_readings_are_gaps() -> None:
    x = np.linspace(0, 1, 21)
    signal = np.ones_like(x)
    whole = draw(x, signal, window_of(x, signal), 41, 3, braille=False)
    assert all(cell != " " for cell in whole.rows[1])
    signal[10] = np.nan
    broken = draw(x, signal, window_of(x, signal), 41, 3, braille=False)
    assert broken.rows[1][19:22] == "   "


@settings(deadline=None, max_examples=60)
@given(
    st.lists(
        st.tuples(
            st.floats(allow_nan=True, allow_infinity=True, width=32),
            st.floats(allow_nan=True, allow_infinity=True, width=32),
        ),
        max_size=40,
    ),
    st.integers(1, 60),
    st.integers(1, 12),
    st.booleans(),
)
def test_any_readings_make_a_picture_of_the_right_size(pairs, width, rows, braille) -> None:
    x = np.array([pair[0] for pair in pairs], dtype=float)
    signal = np.array([pair[1] for pair in pairs], dtype=float)
    window = window_of(x, signal)
    if window is None:
        return
    cells = draw(x, signal, window, width, rows, braille=braille)
    assert len(cells.rows) == rows
    assert all(len(row) == width for row in cells.rows)


def test_the_order_of_readings_does_not_matter() -> None:
    x = FOUND.trace_x_m
    window = window_of(x, FOUND.trace_signal)
    straight = draw(x, FOUND.trace_signal, window, 60, 10, braille=True)
    backward = draw(x[::-1], FOUND.trace_signal[::-1], window, 60, 10, braille=True)
    assert straight.rows == backward.rows


def test_the_pointer_stands_at_the_zero() -> None:
    rows = scan_text(scene("located", glyphs=ASCII), 101, 12).plain.splitlines()
    share = (ZERO_M - FOUND.trace_x_m[0]) / (FOUND.trace_x_m[-1] - FOUND.trace_x_m[0])
    assert rows[-1].index("^") == round(share * 100)
    assert rows[-1].rstrip().endswith("mm stage")


def test_a_scan_says_where_the_zero_is_that_it_does_not_hold() -> None:
    left = dataclasses.replace(
        FOUND, trace_x_m=FOUND.trace_x_m + 1e-3, trace_signal=FOUND.trace_signal
    )
    shown = dataclasses.replace(scene("located"), view=left)
    assert "zero lies left of this" in scan_text(shown, 80, 10).plain


def _height(signal: np.ndarray) -> float:
    """The share of the picture's height that the readings take."""
    x = np.linspace(0.0, 1.0, signal.size)
    window = window_of(x, signal)
    assert window is not None
    return float(np.ptp(signal)) / (window.high - window.low)


@pytest.mark.parametrize(("level", "sigma"), [(1.0, 0.005), (0.02, 0.005), (0.0, 1e-3), (3.0, 0.1)])
def test_plain_noise_is_a_thin_band(level: float, sigma: float) -> None:
    random = np.random.default_rng(5)
    assert _height(level + random.normal(0.0, sigma, 3000)) < 0.5


@pytest.mark.parametrize("sigma", [0.0, 0.002, 0.02])
@pytest.mark.parametrize("reach", [1.0, 1.25, 1.5, 2.0, 3.0, 6.0, 30.0])
def test_a_packet_fills_the_picture(reach: float, sigma: float) -> None:
    random = np.random.default_rng(6)
    x = np.linspace(-reach, reach, 3000)
    signal = 1.0 + 0.4 * np.exp(-(x**2) / 2) * np.cos(40 * x)
    assert _height(signal + random.normal(0.0, sigma, x.size)) > 0.9


@pytest.mark.parametrize("per_fringe", [3.3, 8.0, 40.0])
def test_steady_fringes_fill_the_picture(per_fringe: float) -> None:
    random = np.random.default_rng(7)
    phase = 2 * np.pi * np.arange(3000) / per_fringe
    assert _height(1.0 + 0.4 * np.cos(phase) + random.normal(0.0, 0.01, 3000)) > 0.9


# --- parts ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("at", sorted(VIEWS))
@pytest.mark.parametrize("width", [20, 26, 53, 80, 120])
def test_no_part_is_wider_than_its_place(at: str, width: int) -> None:
    for glyphs in (FULL, ASCII):
        for name, text in parts(scene(at, glyphs=glyphs), width).items():
            wide = [row for row in text.splitlines() if cell_len(row) > width]
            assert not wide, name


@pytest.mark.parametrize("at", sorted(VIEWS))
def test_plain_terminals_get_plain_text(at: str) -> None:
    view = dataclasses.replace(VIEWS[at], bench_name="Nordtisch – µ-Labor", doing="zurück…")
    shown = dataclasses.replace(scene(at, glyphs=ASCII), view=view)
    for name, text in parts(shown, 80).items():
        assert text.isascii(), name


@settings(deadline=None, max_examples=60)
@given(st.text(max_size=60), st.text(max_size=60), st.integers(40, 140))
def test_names_from_files_cannot_break_the_screen(name: str, reason: str, width: int) -> None:
    view = dataclasses.replace(
        VIEWS["fault"], bench_name=name, reason=reason, doing=name, source=reason
    )
    shown = dataclasses.replace(scene("fault"), view=view)
    for text in parts(shown, width).values():
        assert "\x1b" not in text
        assert "\x07" not in text
        assert all(cell_len(row) <= width for row in text.split("\n"))


@pytest.mark.parametrize("at", sorted(VIEWS))
def test_the_stop_key_is_always_shown_and_never_called_more_than_it_is(at: str) -> None:
    for changes in ({}, {"stop_asked": True}, {"asking_to_leave": True}):
        shown = scene(at, **changes)
        foot = foot_text(shown, 80).plain
        assert foot.startswith(" F8 SOFTWARE STOP  or Ctrl+C")
        assert len(foot.rstrip()) <= 80
        for text in parts(shown, 120).values():
            assert "emergency" not in text.lower()


def test_stage_and_opd_are_told_apart() -> None:
    text = zero_text(scene("located"), 60).plain
    assert "± 24 nm stage" in text
    assert "± 48 nm OPD" in text
    assert "measured" in text
    expected = zero_text(scene("scanning"), 60).plain
    assert "only expected" in expected
    assert "± 61 µm stage" in expected
    assert "roughly located" in zero_text(scene("rough"), 60).plain


def test_the_zero_is_written_with_its_uncertainty() -> None:
    assert "13.218 401(12) mm" in zero_text(scene("located"), 60, compact=True).plain
    assert "13.218 401(12) mm" in zero_text(scene("located", glyphs=ASCII), 60).plain


def test_a_zero_known_to_many_digits_is_still_large() -> None:
    view = dataclasses.replace(
        FOUND, zero_m=12.8516536e-3, zero_standard_uncertainty_m=2.7e-9, half_width_m=5.3e-9
    )
    rows = zero_text(dataclasses.replace(scene("located"), view=view), 53).plain.splitlines()
    assert rows[1].count("█") + rows[1].count("▀") + rows[1].count("▄") > 10
    assert rows[3].endswith("(27) mm")
    assert all(cell_len(row) <= 53 for row in rows)


def test_an_unknown_zero_is_not_a_number() -> None:
    view = dataclasses.replace(BEFORE, zero_m=None, half_width_m=None, half_width_start_m=None)
    text = zero_text(dataclasses.replace(scene("before"), view=view), 60).plain
    assert "not known" in text
    assert "nan" not in text


def test_states_are_marks_and_not_only_colours() -> None:
    rows = steps_text(scene("rejected", glyphs=ASCII), 40, 12).plain.splitlines()
    assert rows[1] == "[x] Cautions".ljust(40)
    assert rows[7] == "[!] Judge the result".ljust(40)
    assert rows[8] == "[ ] Keep the record".ljust(40)
    assert "[>] Find the packet" in steps_text(scene("scanning", glyphs=ASCII), 40, 12).plain


def test_the_present_step_is_seen_in_a_long_procedure() -> None:
    long = dataclasses.replace(FOUND, steps=FOUND.steps[:4] * 6 + FOUND.steps[4:])
    shown = dataclasses.replace(scene("located"), view=long)
    text = steps_text(shown, 26, 8).plain
    assert "▶ Second scan" in text
    assert len(text.splitlines()) == 8


def test_where_the_stage_is_in_words() -> None:
    assert "MOVING" in bench_text(scene("scanning"), 26).plain
    assert "at rest" in bench_text(scene("accepted"), 26).plain
    lost = bench_text(scene("fault"), 26).plain
    assert "NOT TRUSTED" in lost
    assert "SATURATED" in lost
    assert "reads    13.217 40 mm" in lost
    assert "at rest" not in bench_text(scene("runaway"), 26).plain
    assert "UNKNOWN" in bench_text(scene("held"), 26).plain


@pytest.mark.parametrize(
    ("at", "facts"),
    [
        ("accepted", ["residual OPD 17(31) nm", "stage left at 13.218 41 mm"]),
        ("rejected", ["the two scans disagree"]),
        ("not-found", ["no packet within", "residual OPD not measured"]),
        ("fault", ["last reading 13.217 40 mm, not trusted", "did not answer"]),
        ("held", ["stage position UNKNOWN"]),
        ("stopped", ["software stop pressed"]),
    ],
)
def test_the_outcome_says_what_was_delivered(at: str, facts: list[str]) -> None:
    text = next_text(scene(at, glyphs=ASCII), 80).plain
    word = VIEWS[at].outcome.upper()
    assert word in text.replace(" ", "") or word in text or " ".join(word) in text
    for fact in facts:
        assert fact in text


def test_a_run_that_is_on_says_what_to_do() -> None:
    assert "Press Enter to begin" in next_text(scene("before"), 80).plain
    assert "type your name" in next_text(scene("caution"), 80).plain
    assert "Y: yes" in next_text(scene("confirm"), 80).plain
    assert "keep hands and draughts away" in next_text(scene("scanning"), 80).plain
    assert "stop the run and leave" in next_text(scene("scanning", asking_to_leave=True), 80).plain
    assert "at rest" in next_text(scene("scanning", stop_asked=True), 80).plain


def test_the_journal_gives_way_to_the_bench_name() -> None:
    assert "journal 9f3c21ab77aa01d2 " in head_text(scene("scanning"), 120).plain
    narrow = head_text(scene("scanning"), 80).plain
    assert "path-equalisation" in narrow
    assert "SIMULATED" in narrow
    assert "~1:31 left" in narrow
    real = dataclasses.replace(SCANNING, simulated=False)
    assert "SIMULATED" not in head_text(dataclasses.replace(scene("scanning"), view=real), 80).plain


def test_every_caution_is_there_word_for_word() -> None:
    rows = question_lines(scene("caution"), 50)
    words = " ".join(row[2:] for row in rows)
    for line in ASKED.question.lines:
        assert line in words


@pytest.mark.parametrize("width", [24, 34, 50, 76])
def test_no_reason_is_cut(width: int) -> None:
    for at in ("rejected", "fault", "runaway", "held"):
        told = " ".join(row.strip() for row in end_rows(scene(at), width))
        view = VIEWS[at]
        for words in view.error_lines or (view.reason, view.next_action):
            assert words.replace(" ", "") in told.replace(" ", ""), at


def test_a_reason_too_long_for_the_screen_can_be_scrolled() -> None:
    long = dataclasses.replace(VIEWS["rejected"], reason=" ".join(f"word{k}" for k in range(200)))
    shown = dataclasses.replace(scene("rejected"), view=long)
    seen = ""
    for scrolled in range(60):
        text = next_text(dataclasses.replace(shown, scrolled=scrolled), 60, 12).plain
        assert len(text.splitlines()) == 12
        seen += text
    assert all(f"word{k}" in seen for k in range(200))
    assert "more below" not in text


@given(st.integers(20, 60), st.floats(0, 400))
def test_no_unit_leaves_its_number(width: int, at_mm: float) -> None:
    words = f"moving to {at_mm:.4f} mm, overshoot 12.5 µm before 13.218 401(12) mm, ± 3 nm"
    rows = wrapped(words, width, FULL)
    assert " ".join(rows) == words
    assert not [row for row in rows if row.split()[0].rstrip(",") in ("mm", "µm", "nm", "401(12)")]


def test_what_is_cut_ends_with_a_mark() -> None:
    assert wrapped("one two three four", 9, FULL, most=1) == ["one two …"]
    assert wrapped("one two", 9, FULL, most=1) == ["one two"]
    details = "a packet of white light is looked for where the red one was seen before, with care"
    view = dataclasses.replace(SCANNING, steps=(StepView("Find the packet", "now", details),))
    rows = steps_text(dataclasses.replace(scene("scanning"), view=view), 22, 5).plain
    assert rows.splitlines()[-1].endswith("…")


def test_micrometres_are_written_as_the_terminal_can() -> None:
    for at in VIEWS:
        for text in parts(scene(at), 80).values():
            assert " um" not in text
    assert "1 um" in zero_text(scene("scanning", glyphs=ASCII), 60).plain
    assert FULL.text("5 um of the um") == "5 µm of the um"


def test_a_question_ends_with_a_question() -> None:
    ends = {at: question_lines(scene(at), 60)[-1] for at in ("confirm", "lost", "caution")}
    assert ends["confirm"].startswith("Is all of this so?")
    assert ends["lost"].startswith("May the stage be homed now?")
    assert "?" not in ends["caution"]


def test_the_foot_offers_only_what_works_and_whole() -> None:
    assert "Y yes  N no" in foot_text(scene("confirm"), 60).plain
    assert "Y yes  N no" in foot_text(scene("scanning", asking_to_leave=True), 60).plain
    assert "Y yes" not in foot_text(scene("scanning"), 80).plain
    assert "F4" not in foot_text(scene("scanning", no_colour=True), 120).plain
    for at in VIEWS:
        for width in (52, 60, 80):
            assert foot_text(scene(at), width).plain.rstrip().endswith("leave")
