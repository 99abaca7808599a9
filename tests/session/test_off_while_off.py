"""F9 while the supply is known to be off: it is told so once more, and the walk keeps its place."""

from __future__ import annotations

import asyncio
import contextlib
from dataclasses import replace

import pytest

from benchkit.events import OutputOff, StopAsked
from benchkit.procedure.actions import Question
from benchkit.procedure.securing import MAKING_SURE
from benchkit.procedure.state import State
from benchkit.session.front import Reply
from tests.procedure.driver import OPENED, small
from tests.session.fakes import Run, quick_predictions


@pytest.fixture(autouse=True)
def quickly(monkeypatch: pytest.MonkeyPatch) -> None:
    quick_predictions(monkeypatch)


def pressed_at(item: str, *, manual: bool = False, confirmed: bool = True, times: int = 1) -> Run:
    """Ask for off while a question of `item` stands, and answer it well a little later."""
    run = Run(manual=manual)
    pressed: list[str] = []

    async def answer(question: Question, refused: str) -> Reply | None:
        if question.item == item and len(pressed) < times:
            pressed.append(item)
            run.keeper.confirmed = confirmed
            run.session.off_now()
            await asyncio.sleep(0.3)
            run.keeper.confirmed = True
        return None

    run.front.answer = answer
    run.go()
    assert len(pressed) == times
    return run


@pytest.mark.parametrize("item", ["look.parts", "cold.end.ohm.spreader.lower", "limit.connect"])
def test_the_place_is_kept(item: str) -> None:
    run = pressed_at(item)
    assert run.session.state.stopped == ""
    sure = [
        event for event in run.keeper.kept if isinstance(event, (OutputOff, StopAsked)) and MAKING_SURE in event.reason
    ]
    assert {type(event) for event in sure} == {OutputOff, StopAsked}, "both stand in the record"
    assert any("The walk stays where it is" in view.message for view in run.front.views)
    state, _ = run.session.job.walk.replay([(event, 0.0) for event in run.keeper.kept])
    assert state.stopped == "", "and replay agrees"


def test_pressing_it_again_later_works_again() -> None:
    run = pressed_at("look.parts", times=1)
    assert len([reason for reason in run.keeper.offs if reason.startswith(MAKING_SURE)]) == 1
    run = pressed_at("power.ready")
    assert run.session.state.stopped == ""


def test_where_the_supply_is_on_it_ends_the_walk() -> None:
    run = pressed_at("power.output-first.output")
    assert run.session.state.stopped
    assert "the operator asked for it" in run.keeper.offs


def test_where_it_does_not_confirm_it_ends_the_walk() -> None:
    run = pressed_at("look.parts", confirmed=False)
    assert run.session.state.stopped


def test_a_hand_supply_that_nobody_was_asked_to_switch_on_keeps_the_place_too() -> None:
    opened = replace(OPENED, supply="manual")
    run = Run(manual=True, opened=opened)
    pressed: list[str] = []

    async def answer(question: Question, refused: str) -> Reply | None:
        if question.item == "look.parts" and not pressed:
            pressed.append(question.item)
            run.session.off_now()
            await asyncio.sleep(0.3)
        if question.item == "cold.least":
            raise asyncio.CancelledError
        return None

    async def go() -> None:
        run.front.answer = answer
        with contextlib.suppress(asyncio.CancelledError, TimeoutError):
            await asyncio.wait_for(run.run(), 3.0)

    asyncio.run(go())
    assert pressed
    assert run.session.state.stopped == ""
    assert run.session.job.walk.item(run.session.state).id == "cold.least"
    assert run.keeper.offs == [], "nobody claims to have asked it"
    assert any("Nothing here can switch your supply" in view.message for view in run.front.views)


def test_once_it_was_to_be_on_off_ends_a_walk_by_hand() -> None:
    state = replace(State(), opened=replace(OPENED, supply="manual"), phase="asking", ever_on=True)
    state, _ = small()._stop_asked(state, StopAsked(reason=f"{MAKING_SURE}: the operator asked for it"))
    assert state.stopped
