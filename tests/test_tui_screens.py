"""Whole screens as text, at both sizes that have to be good, and in every set of colours."""

from __future__ import annotations

import asyncio
import time
from collections.abc import Iterable

import pytest
from test_tui_fake import VIEWS, FakeControl

from bench.tui.app import EvenarmApp
from bench.tui.glyphs import ASCII, FULL, Glyphs

TINY, SMALL, LARGE = (60, 20), (80, 24), (120, 40)


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


@pytest.mark.parametrize("size", [TINY, SMALL, LARGE], ids=["60x20", "80x24", "120x40"])
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
    for at, text in shown(moments, SMALL).items():
        assert "F4" not in text  # a key that would do nothing is not offered
        assert text.splitlines()[:-1] == coloured[at].splitlines()[:-1]


# What stands on its own at 60 columns, and must not lose its unit or its end there.
WHOLE = {
    "rough": ["ZERO roughly located", "stage    11.712 10 mm", "run-up"],
    "before": ["ZERO only expected"],
    "located": ["ZERO stage reading, measured", "13.218 401(12) mm"],
    "caution": ["Ctrl+Q leave", "± 4.8 mm stage"],
    "lost": ["NOT TRUSTED", "7.500 00 mm", "Y yes  N no"],
    "runaway": ["last reading 7.677 66 mm, not trusted", "controller", "MAY STILL MOVE"],
    "held": ["where: /home", "why: held", "2024-05-06 07:08:09", "mend: end", "in bench.toml"],
    "accepted": ["journal head 41d07be2c0ff5a93", "Q leaves."],
    "rejected": ["100 nm allows", "Q leaves; run again from the shell."],
}


def test_what_matters_is_whole_in_a_small_terminal() -> None:
    for at, text in shown(WHOLE, TINY).items():
        for words in WHOLE[at]:
            assert words in text, f"{at}:\n{text}"
        assert "left at 7." not in text


def test_a_position_that_is_not_trusted_is_nowhere_firm() -> None:
    for at, text in shown(["lost", "runaway"], SMALL).items():
        assert "left at" not in text, at
        assert "NOT TRUSTED" in text, at


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
