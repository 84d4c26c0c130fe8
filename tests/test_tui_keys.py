"""What keys do, in every state: through keys only."""

from __future__ import annotations

import asyncio
import sys
from collections.abc import Awaitable, Callable
from pathlib import Path

import pytest
from textual.app import ComposeResult
from textual.pilot import Pilot
from textual.screen import ModalScreen
from textual.widgets import Input

sys.path.insert(0, str(Path(__file__).parent))
from test_tui_fake import VIEWS, BrokenControl, FakeControl
from test_tui_screens import screen_text

from bench.errors import UsageError
from bench.tui.app import EvenarmApp


class Ticks:
    """A clock that the test moves."""

    def __init__(self) -> None:
        self.now = 0.0

    def __call__(self) -> float:
        return self.now


def play(
    control: FakeControl,
    keys: Callable[[Pilot[int], EvenarmApp, Ticks], Awaitable[None]],
    size: tuple[int, int] = (120, 40),
) -> EvenarmApp:
    """Run the app on ``control`` with ``keys``; returns it after it has been left or closed."""

    async def session() -> EvenarmApp:
        ticks = Ticks()
        app = EvenarmApp(control, now_s=ticks)
        async with app.run_test(size=size) as pilot:
            await pilot.pause()
            await keys(pilot, app, ticks)
        return app

    return asyncio.run(session())


async def look(pilot: Pilot[int]) -> None:
    """Let the screen look at the run once more, without waiting for its next look."""
    if pilot.app.is_running:
        pilot.app.poll()
    await pilot.pause()


@pytest.mark.parametrize("key", ["f8", "ctrl+c"])
def test_stop_in_every_state(key: str) -> None:
    control = FakeControl("before", stops_at_once=False)

    async def keys(pilot, app, ticks) -> None:
        for count, at in enumerate(VIEWS):
            control.started = at != "before"
            control.go(at)
            await look(pilot)
            await pilot.press(key)
            assert len(control.stops) == count + 1, at

    play(control, keys)
    assert set(control.stops) == {"software stop pressed"}


@pytest.mark.parametrize("at", ["caution", "confirm", "scanning", "accepted"])
def test_stop_as_the_first_key(at: str) -> None:
    control = FakeControl(at)

    async def keys(pilot, app, ticks) -> None:
        await pilot.press("f8")

    play(control, keys)
    assert control.stops == ["software stop pressed"]


def test_stop_while_a_name_is_typed() -> None:
    control = FakeControl("caution")

    async def keys(pilot, app, ticks) -> None:
        await pilot.press("A", "n", "n")
        assert isinstance(app.focused, Input)
        await pilot.press("f8")
        await look(pilot)
        assert "Reason: software stop pressed" in screen_text(app)

    play(control, keys)
    assert control.stops == ["software stop pressed"]
    assert not [call for call in control.calls if call[0] == "answer"]


def test_stop_while_a_dialog_is_open() -> None:
    class Dialog(ModalScreen[None]):
        def compose(self) -> ComposeResult:
            yield Input()

    control = FakeControl("scanning")

    async def keys(pilot, app, ticks) -> None:
        await app.push_screen(Dialog())
        await pilot.pause()
        assert isinstance(app.focused, Input)
        await pilot.press("f8")
        await look(pilot)

    play(control, keys)
    assert control.stops == ["software stop pressed"]


def test_stop_while_leaving_is_asked() -> None:
    control = FakeControl("scanning")

    async def keys(pilot, app, ticks) -> None:
        await pilot.press("q", "ctrl+c")

    play(control, keys)
    assert control.stops == ["software stop pressed"]


def test_stop_that_takes_its_time_is_shown_and_may_be_pressed_again() -> None:
    control = FakeControl("scanning", stops_at_once=False)

    async def keys(pilot, app, ticks) -> None:
        await pilot.press("f8", "f8")
        assert "Wait until the stage is at rest" in screen_text(app)
        control.go("stopped")
        await look(pilot)
        assert "Reason: software stop pressed" in screen_text(app)
        await pilot.press("q")

    app = play(control, keys)
    assert len(control.stops) == 2
    assert app.return_value == 130


def test_a_stop_before_the_start_forbids_the_start() -> None:
    control = FakeControl("before")

    async def keys(pilot, app, ticks) -> None:
        await pilot.press("f8", "enter")
        assert "Nothing was begun" in screen_text(app)
        await pilot.press("q")

    app = play(control, keys)
    assert [call[0] for call in control.calls] == ["stop"]
    assert app.return_value == 130


def test_a_whole_run_by_keys() -> None:
    control = FakeControl("before")

    async def keys(pilot, app, ticks) -> None:
        await pilot.press("enter")
        await look(pilot)
        await pilot.press(*"Ada q", "enter")  # letters that are keys elsewhere are only letters
        ticks.now += 1.0
        await look(pilot)
        assert "Both beams reach the detector" in screen_text(app)
        await pilot.press("y")
        for at in ("scanning", "located", "accepted"):
            control.go(at)
            await look(pilot)
        assert "residual OPD 17(31) nm" in screen_text(app)
        await pilot.press("q")

    app = play(control, keys)
    assert control.calls == [("start",), ("answer", "q1", "Ada q"), ("answer", "q2", True)]
    assert app.return_value == 0


@pytest.mark.parametrize(
    ("at", "status"),
    [("accepted", 0), ("rejected", 1), ("not-found", 1), ("stopped", 130), ("fault", 3)],
)
def test_exit_status_follows_the_outcome(at: str, status: int) -> None:
    async def keys(pilot, app, ticks) -> None:
        await pilot.press("q")

    assert play(FakeControl(at), keys).return_value == status


def test_leaving_before_the_start_is_nothing() -> None:
    control = FakeControl("before")

    async def keys(pilot, app, ticks) -> None:
        await pilot.press("ctrl+q")

    assert play(control, keys).return_value == 0
    assert control.calls == []


def test_leaving_a_run_asks_and_stops_first() -> None:
    control = FakeControl("scanning", stops_at_once=False)

    async def keys(pilot, app, ticks) -> None:
        await pilot.press("q")
        assert "stop the run and leave" in screen_text(app)
        assert control.calls == []
        await pilot.press("n")
        assert "keep hands and draughts away" in screen_text(app)
        await pilot.press("q", "y")
        assert control.stops == ["the operator left"]
        await look(pilot)
        assert app.is_running  # the screen stays until the stage is at rest
        control.go("stopped")
        await look(pilot)

    app = play(control, keys)
    assert app.return_value == 130


def test_leaving_while_a_name_is_typed() -> None:
    control = FakeControl("caution")

    async def keys(pilot, app, ticks) -> None:
        await pilot.press("A", "ctrl+q")
        await pilot.press("y")
        await look(pilot)

    app = play(control, keys)
    assert control.stops == ["the operator left"]
    assert app.return_value == 130


def test_a_name_is_wanted_and_not_just_enter() -> None:
    control = FakeControl("caution")

    async def keys(pilot, app, ticks) -> None:
        for wrong in ("", " ", "12"):
            await pilot.press(*wrong, "enter")
            await look(pilot)
            assert "Type your name first" in screen_text(app)
        assert control.calls == []
        await pilot.press(*"Lin", "enter")

    play(control, keys)
    assert control.calls == [("answer", "q1", "12Lin")] or control.calls == [
        ("answer", "q1", "12 Lin")
    ]


def test_long_cautions_are_read_to_the_end_first() -> None:
    control = FakeControl("caution")

    async def keys(pilot, app, ticks) -> None:
        assert "more below" in screen_text(app)
        assert "Know where the power switch" not in screen_text(app)
        await pilot.press(*"Lin", "enter")
        assert "Read to the end first" in screen_text(app)
        assert control.calls == []
        await pilot.press("pagedown")
        await look(pilot)
        assert "Know where the power switch" in screen_text(app)
        assert "more below" not in screen_text(app)
        await pilot.press("up", "enter")  # having seen the end once is enough

    play(control, keys, size=(80, 24))
    assert control.calls == [("answer", "q1", "Lin")]


def test_a_key_hit_twice_answers_one_question() -> None:
    control = FakeControl("confirm")

    async def keys(pilot, app, ticks) -> None:
        await pilot.press("y")
        assert control.calls == []  # too soon after the question came up
        ticks.now += 1.0
        await look(pilot)
        await pilot.press("y", "y", "n")

    play(control, keys)
    assert control.calls == [("answer", "q2", True)]


def test_no_is_an_answer() -> None:
    control = FakeControl("confirm")

    async def keys(pilot, app, ticks) -> None:
        ticks.now += 1.0
        await look(pilot)
        await pilot.press("n")

    play(control, keys)
    assert control.calls == [("answer", "q2", False)]


def test_letters_do_nothing_while_the_bench_works() -> None:
    control = FakeControl("scanning")

    async def keys(pilot, app, ticks) -> None:
        await pilot.press("enter", "y", "n", "a", "space", "up", "down", "escape", "tab")
        assert "keep hands and draughts away" in screen_text(app)

    play(control, keys)
    assert control.calls == []


def test_a_part_that_cannot_be_drawn_stops_the_run() -> None:
    control = BrokenControl("located")

    async def keys(pilot, app, ticks) -> None:
        for _ in range(10):
            await look(pilot)

    with pytest.raises(TypeError):
        play(control, keys)
    assert "the screen failed" in control.stops


def test_a_refused_start_is_handed_on() -> None:
    class Refusing(FakeControl):
        def start(self) -> None:
            raise UsageError("The journal is in use", mend="close the other window")

    control = Refusing("before")

    async def keys(pilot, app, ticks) -> None:
        await pilot.press("enter")

    app = play(control, keys)
    assert isinstance(app.failure, UsageError)
    assert app.return_value == 2
