"""Whole screens as text, at both sizes that have to be good, and in every set of colours."""

from __future__ import annotations

import asyncio
import sys
import time
from pathlib import Path

import pytest

sys.path.insert(0, str(Path(__file__).parent))
from test_tui_fake import VIEWS, FakeControl

from bench.tui.app import EvenarmApp
from bench.tui.glyphs import ASCII, FULL, Glyphs


def screen_text(app: EvenarmApp) -> str:
    """What stands on the screen, row by row."""
    strips = app.screen._compositor.render_strips()
    return "\n".join("".join(segment.text for segment in strip).rstrip() for strip in strips)


async def settled_text(app: EvenarmApp) -> str:
    """The screen's text once it is complete and has stayed the same over several looks."""
    end_s = time.monotonic() + 20.0
    text, same = "", 0
    while same < 3 and time.monotonic() < end_s:
        await asyncio.sleep(0.02)  # the screen library lays out at most sixty times a second
        app.poll()
        before, text = text, screen_text(app)
        same = same + 1 if text == before and "SOFTWARE STOP" in text else 0
    return text


async def _shown(at: str, size: tuple[int, int], glyphs: Glyphs, presses: tuple[str, ...]) -> str:
    app = EvenarmApp(FakeControl(at), glyphs=glyphs)
    async with app.run_test(size=size) as pilot:
        await pilot.press(*presses)
        return await settled_text(app)


def shown(
    at: str, size: tuple[int, int], glyphs: Glyphs = FULL, presses: tuple[str, ...] = ()
) -> str:
    return asyncio.run(_shown(at, size, glyphs, presses))


@pytest.mark.parametrize("size", [(80, 24), (120, 40)], ids=["80x24", "120x40"])
@pytest.mark.parametrize("at", list(VIEWS))
def test_screen(at: str, size: tuple[int, int], snapshot) -> None:
    text = shown(at, size)
    assert len(text.splitlines()) == size[1]
    assert text == snapshot


def test_screen_in_plain_ascii(snapshot) -> None:
    text = shown("located", (80, 24), ASCII)
    assert text.isascii()
    assert text == snapshot


def test_a_question_in_plain_ascii_is_plain_too() -> None:
    assert shown("caution", (80, 24), ASCII).isascii()


def test_other_colours_change_no_word() -> None:
    plain = shown("located", (80, 24))
    for presses in (("f4",), ("f4", "f4")):
        assert shown("located", (80, 24), presses=presses) == plain


@pytest.mark.parametrize("at", ["caution", "located", "rejected"])
def test_without_colour_the_screen_says_the_same(at: str, monkeypatch) -> None:
    coloured = shown(at, (80, 24))
    monkeypatch.setenv("NO_COLOR", "1")
    assert shown(at, (80, 24)) == coloured


@pytest.mark.parametrize("size", [(40, 10), (20, 5), (200, 60)])
@pytest.mark.parametrize("at", ["caution", "located", "rejected"])
def test_odd_sizes_keep_the_stop_key(at: str, size: tuple[int, int]) -> None:
    rows = shown(at, size).splitlines()
    assert rows[-1].startswith(" F8 SOFTWARE STOP")


def test_a_resize_is_followed() -> None:
    async def resized() -> tuple[str, str]:
        app = EvenarmApp(FakeControl("located"))
        async with app.run_test(size=(120, 40)) as pilot:
            await settled_text(app)
            await pilot.resize_terminal(80, 24)
            return await settled_text(app), shown_small

    shown_small = shown("located", (80, 24))
    after, small = asyncio.run(resized())
    assert after == small
