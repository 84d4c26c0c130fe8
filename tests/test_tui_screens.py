"""Whole screens as text, at both sizes that have to be good, and in every set of colours."""

from __future__ import annotations

import asyncio
import time
from collections.abc import Iterable

import pytest
from test_tui_fake import VIEWS, FakeControl

from bench.tui.app import EvenarmApp
from bench.tui.glyphs import ASCII, FULL, Glyphs

SMALL, LARGE = (80, 24), (120, 40)


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


def shown(moments: Iterable[str], size: tuple[int, int], glyphs: Glyphs = FULL) -> dict[str, str]:
    """The screen at each of ``moments``, one after the other."""

    async def session() -> dict[str, str]:
        control = FakeControl("before")
        app = EvenarmApp(control, glyphs=glyphs)
        texts = {}
        async with app.run_test(size=size):
            for at in moments:
                control.started = at != "before"
                control.go(at)
                texts[at] = await settled_text(app)
        return texts

    return asyncio.run(session())


@pytest.mark.parametrize("size", [SMALL, LARGE], ids=["80x24", "120x40"])
def test_screens(size: tuple[int, int], snapshot) -> None:
    for at, text in shown(VIEWS, size).items():
        assert len(text.splitlines()) == size[1]
        assert text == snapshot(name=at)


def test_a_screen_does_not_depend_on_those_before_it() -> None:
    # a question that was opened and closed leaves nothing behind
    order = ["caution", "located", "confirm", "accepted"]
    there = shown(order, SMALL)
    for at in order:
        assert shown([at], SMALL)[at] == there[at]


def test_screens_in_plain_ascii(snapshot) -> None:
    for at, text in shown(["caution", "located", "rejected"], SMALL, ASCII).items():
        assert text.isascii()
        assert text == snapshot(name=at)


def test_other_colours_change_no_word() -> None:
    async def session() -> list[str]:
        app = EvenarmApp(FakeControl("located"))
        texts = []
        async with app.run_test(size=SMALL) as pilot:
            for _ in range(3):
                texts.append(f"{app.scene.palette.name} {await settled_text(app)}")
                await pilot.press("f4")
        return texts

    names, texts = zip(*(text.split(" ", 1) for text in asyncio.run(session())), strict=True)
    assert names == ("evenarm-dark", "evenarm-bright", "evenarm-red")
    assert len(set(texts)) == 1


def test_without_colour_the_screen_says_the_same(monkeypatch) -> None:
    moments = ["caution", "located", "rejected"]
    coloured = shown(moments, SMALL)
    monkeypatch.setenv("NO_COLOR", "1")
    assert shown(moments, SMALL) == coloured


@pytest.mark.parametrize("size", [(40, 10), (20, 5), (200, 60)])
def test_odd_sizes_keep_the_stop_key(size: tuple[int, int]) -> None:
    for text in shown(["caution", "located", "rejected"], size).values():
        assert text.splitlines()[-1].startswith(" F8 SOFTWARE STOP")


def test_a_resize_is_followed() -> None:
    async def resized() -> str:
        app = EvenarmApp(FakeControl("located"))
        async with app.run_test(size=LARGE) as pilot:
            await settled_text(app)
            await pilot.resize_terminal(*SMALL)
            return await settled_text(app)

    assert asyncio.run(resized()) == shown(["located"], SMALL)["located"]
