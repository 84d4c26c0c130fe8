"""What keys do, in every state: through keys only."""

from __future__ import annotations

import asyncio
import time
from collections.abc import Awaitable, Callable
from dataclasses import replace

import pytest
from test_tui_fake import CAUTION, VIEWS, BrokenControl, FakeControl
from test_tui_screens import screen_text
from textual.app import ComposeResult
from textual.pilot import Pilot
from textual.screen import ModalScreen
from textual.widgets import Input

from bench.errors import UsageError
from bench.procedure.live import LiveView
from bench.tui.app import EvenarmApp
from bench.tui.panels import QuestionPanel

DEADLINE_S = 20.0


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
            await see(pilot, "SOFTWARE STOP")
            await keys(pilot, app, ticks)
        return app

    return asyncio.run(session())


async def settle(pilot: Pilot[int]) -> None:
    """Wait until every message that is on its way now has been handled.

    A message that is put behind them in each queue on their way comes back when they are done; the
    pilot's own wait goes by the load of the processor, and that is not a promise.
    """
    app = pilot.app
    for _ in range(2):
        for target in (app, app.focused or app.screen, app.screen, app):
            passed = asyncio.Event()
            if app.is_running and target.call_later(passed.set):
                await asyncio.wait_for(passed.wait(), DEADLINE_S)


async def look(pilot: Pilot[int]) -> None:
    """Let the screen look at the run once more, without waiting for its next look."""
    if pilot.app.is_running:
        pilot.app.poll()
    await settle(pilot)


async def press(pilot: Pilot[int], *keys: str) -> None:
    """Press keys one after the other, each fully handled before the next."""
    for key in keys:
        await pilot.press(key)
        await settle(pilot)


async def see(pilot: Pilot[int], words: str) -> None:
    """Wait until ``words`` stand on the screen."""
    end_s = time.monotonic() + DEADLINE_S
    while words not in screen_text(pilot.app):
        assert time.monotonic() < end_s, f"no {words!r} on the screen:\n{screen_text(pilot.app)}"
        await look(pilot)
        await asyncio.sleep(0)


async def read(pilot: Pilot[int]) -> None:
    """Wait until the open question has been on the screen to its end."""
    end_s = time.monotonic() + DEADLINE_S
    while not pilot.app.query_one(QuestionPanel).read_to_end:
        assert time.monotonic() < end_s
        await look(pilot)
        await asyncio.sleep(0.005)


@pytest.mark.parametrize("key", ["f8", "ctrl+c"])
def test_stop_in_every_state(key: str) -> None:
    control = FakeControl("before", stops_at_once=False)

    async def keys(pilot, app, ticks) -> None:
        for count, at in enumerate(VIEWS):
            control.started = at != "before"
            control.go(at)
            await look(pilot)
            await press(pilot, key)
            assert len(control.stops) == count + 1, at

    play(control, keys)
    assert set(control.stops) == {"software stop pressed"}


@pytest.mark.parametrize("at", ["caution", "confirm", "scanning", "accepted"])
def test_stop_as_the_first_key(at: str) -> None:
    control = FakeControl(at)

    async def keys(pilot, app, ticks) -> None:
        await press(pilot, "f8")

    play(control, keys)
    assert control.stops == ["software stop pressed"]


def test_stop_while_a_name_is_typed() -> None:
    control = FakeControl("caution")

    async def keys(pilot, app, ticks) -> None:
        await press(pilot, "A", "n", "n")
        assert isinstance(app.focused, Input)
        await press(pilot, "f8")
        await look(pilot)
        await see(pilot, "Reason: software stop pressed")

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
        app.screen.query_one(Input).focus()
        await settle(pilot)
        assert isinstance(app.focused, Input)
        await press(pilot, "f8")
        await look(pilot)

    play(control, keys)
    assert control.stops == ["software stop pressed"]


def test_stop_while_leaving_is_asked() -> None:
    control = FakeControl("scanning")

    async def keys(pilot, app, ticks) -> None:
        await press(pilot, "q", "ctrl+c")

    play(control, keys)
    assert control.stops == ["software stop pressed"]


def test_stop_that_takes_its_time_is_shown_and_may_be_pressed_again() -> None:
    control = FakeControl("scanning", stops_at_once=False)

    async def keys(pilot, app, ticks) -> None:
        await press(pilot, "f8", "f8")
        await see(pilot, "Wait until the stage is at rest")
        control.go("stopped")
        await look(pilot)
        await see(pilot, "Reason: software stop pressed")
        await press(pilot, "q")

    app = play(control, keys)
    assert len(control.stops) == 2
    assert app.return_value == 130


def test_a_stop_before_the_start_forbids_the_start() -> None:
    control = FakeControl("before")

    async def keys(pilot, app, ticks) -> None:
        await press(pilot, "f8", "enter")
        await see(pilot, "Nothing was begun")
        await press(pilot, "q")

    app = play(control, keys)
    assert [call[0] for call in control.calls] == ["stop"]
    assert app.return_value == 130


def test_a_whole_run_by_keys() -> None:
    control = FakeControl("before")

    async def keys(pilot, app, ticks) -> None:
        await press(pilot, "enter")
        await look(pilot)
        await read(pilot)
        await press(pilot, *"Ada q", "enter")  # letters that are keys elsewhere are only letters
        ticks.now += 1.0
        await read(pilot)
        await see(pilot, "Both beams reach the detector")
        await press(pilot, "y")
        for at in ("scanning", "located", "accepted"):
            control.go(at)
            await look(pilot)
        await see(pilot, "residual OPD 17(31) nm")
        await press(pilot, "q")

    app = play(control, keys)
    assert control.calls == [("start",), ("answer", "q1", "Ada q"), ("answer", "q2", True)]
    assert app.return_value == 0


@pytest.mark.parametrize(
    ("at", "status"),
    [("accepted", 0), ("rejected", 1), ("not-found", 1), ("stopped", 130), ("fault", 3)],
)
def test_exit_status_follows_the_outcome(at: str, status: int) -> None:
    async def keys(pilot, app, ticks) -> None:
        await press(pilot, "q")

    assert play(FakeControl(at), keys).return_value == status


def test_leaving_before_the_start_is_nothing() -> None:
    control = FakeControl("before")

    async def keys(pilot, app, ticks) -> None:
        await press(pilot, "ctrl+q")

    assert play(control, keys).return_value == 0
    assert control.calls == []


def test_leaving_a_run_asks_and_stops_first() -> None:
    control = FakeControl("scanning", stops_at_once=False)

    async def keys(pilot, app, ticks) -> None:
        await press(pilot, "q")
        await see(pilot, "stop the run and leave")
        assert control.calls == []
        await press(pilot, "n")
        await see(pilot, "keep hands and draughts away")
        await press(pilot, "q", "y")
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
        await press(pilot, "A", "ctrl+q")
        await press(pilot, "y")
        await look(pilot)

    app = play(control, keys)
    assert control.stops == ["the operator left"]
    assert app.return_value == 130


@pytest.mark.parametrize("wrong", ["", "  ", "12"])
def test_a_name_is_wanted_and_not_just_enter(wrong: str) -> None:
    control = FakeControl("caution")

    async def keys(pilot, app, ticks) -> None:
        await read(pilot)
        await press(pilot, *wrong, "enter")
        await see(pilot, "Type your name first")
        assert control.calls == []
        await press(pilot, *"Lin", "enter")

    play(control, keys)
    assert control.calls == [("answer", "q1", f"{wrong}Lin".strip())]


def test_long_cautions_are_read_to_the_end_first() -> None:
    control = FakeControl("caution")

    async def keys(pilot, app, ticks) -> None:
        await see(pilot, "more below")
        assert "The software stop is a program" not in screen_text(app)
        await press(pilot, *"Lin", "enter")
        await see(pilot, "Read to the end first")
        assert control.calls == []
        await press(pilot, "pagedown")
        await look(pilot)
        await see(pilot, "The software stop is a program")
        await look(pilot)
        assert "more below" not in screen_text(app)
        await press(pilot, "up", "enter")  # having seen the end once is enough

    play(control, keys, size=(80, 24))
    assert control.calls == [("answer", "q1", "Lin")]


def test_each_question_is_read_anew() -> None:
    class Twice(FakeControl):
        second = False

        def view(self) -> LiveView:
            asked = replace(CAUTION, id="q9") if self.second else CAUTION
            return replace(VIEWS["caution"], question=asked)

        def answer(self, question_id: str, value: str | bool) -> None:
            self._note("answer", question_id, value)
            self.second = True

    control = Twice("caution")

    async def keys(pilot, app, ticks) -> None:
        await see(pilot, "more below")
        await press(pilot, "pagedown")
        await read(pilot)
        await press(pilot, *"Lin", "enter")
        await look(pilot)
        await see(pilot, "more below")
        await press(pilot, *"Lin", "enter")
        await see(pilot, "Read to the end first")

    play(control, keys, size=(80, 24))
    assert control.calls == [("answer", "q1", "Lin")]


def test_a_key_hit_twice_answers_one_question() -> None:
    control = FakeControl("confirm")

    async def keys(pilot, app, ticks) -> None:
        await read(pilot)
        await press(pilot, "y")
        assert control.calls == []  # too soon after the question came up
        ticks.now += 1.0
        await read(pilot)
        await press(pilot, "y", "y", "n")

    play(control, keys)
    assert control.calls == [("answer", "q2", True)]


def test_no_is_an_answer() -> None:
    control = FakeControl("confirm")

    async def keys(pilot, app, ticks) -> None:
        ticks.now += 1.0
        await read(pilot)
        await press(pilot, "n")

    play(control, keys)
    assert control.calls == [("answer", "q2", False)]


@pytest.mark.parametrize("key", ["enter", "a", "space", "escape", "7"])
def test_another_key_than_yes_or_no_is_told_so(key: str) -> None:
    control = FakeControl("confirm")

    async def keys(pilot, app, ticks) -> None:
        ticks.now += 1.0
        await read(pilot)
        assert "Press Y or N" not in screen_text(app)
        await press(pilot, key)
        await see(pilot, "Press Y or N")
        await press(pilot, "y")

    play(control, keys)
    assert control.calls == [("answer", "q2", True)]


def test_letters_do_nothing_while_the_bench_works() -> None:
    control = FakeControl("scanning")

    async def keys(pilot, app, ticks) -> None:
        await press(pilot, "enter", "y", "n", "a", "space", "up", "down", "escape", "tab")
        await see(pilot, "keep hands and draughts away")

    play(control, keys)
    assert control.calls == []


def test_a_part_that_cannot_be_drawn_stops_the_run() -> None:
    control = BrokenControl("located")

    async def keys(pilot, app, ticks) -> None:
        end_s = time.monotonic() + DEADLINE_S
        while not control.stops and time.monotonic() < end_s:
            await asyncio.sleep(0.01)  # its own look, not ours, has to fail

    with pytest.raises(TypeError):
        play(control, keys)
    assert "the screen failed" in control.stops


def test_a_refused_start_is_handed_on() -> None:
    class Refusing(FakeControl):
        def start(self) -> None:
            raise UsageError("The journal is in use", mend="close the other window")

    control = Refusing("before")

    async def keys(pilot, app, ticks) -> None:
        await press(pilot, "enter")

    app = play(control, keys)
    assert isinstance(app.failure, UsageError)
    assert app.return_value == 2
