"""The foot of a page, on a screen: what becomes of keys that are early, wrong or typed after a refusal."""

from __future__ import annotations

import asyncio
from collections.abc import Awaitable, Callable

import pytest
from textual.app import App, ComposeResult
from textual.widgets import Input

from benchkit.procedure.actions import Choice, Question
from benchkit.session.front import Reply
from benchkit.ui.widgets.answer import TOO_SOON, Answer, Choices
from benchkit.ui.widgets.answer_keys import keys_in_words
from benchkit.ui.widgets.words import Words
from tests.ui.scripted import BY_HAND_READING, CONFIRM, DECIDE, HOLD


class Foot(App[None]):
    """Nothing but an answer, with a clock that the test moves."""

    def __init__(self, guard_s: float = 0.0) -> None:
        super().__init__()
        self.now_s = 0.0
        self.replies: list[Reply] = []
        self.answer = Answer(clock=lambda: self.now_s, guard_s=guard_s)

    def compose(self) -> ComposeResult:
        yield self.answer

    def on_answer_given(self, message: Answer.Given) -> None:
        self.replies.append(message.reply)

    @property
    def hint(self) -> str:
        return str(self.answer.query_one(".answer-hint", Words).content)

    @property
    def entry(self) -> str:
        return self.answer.query_one(Input).value


Test = Callable[["Foot", Callable[..., Awaitable[None]]], Awaitable[None]]


def on_foot(test: Test, *, guard_s: float = 0.0, size: tuple[int, int] = (80, 24)) -> None:
    async def whole() -> None:
        app = Foot(guard_s)
        async with app.run_test(size=size) as pilot:

            async def press(*keys: str) -> None:
                await pilot.press(*keys)
                await pilot.pause()

            await test(app, press)

    asyncio.run(whole())


def test_what_was_refused_is_replaced_by_what_is_typed_next() -> None:
    async def test(app: Foot, press: Callable[..., Awaitable[None]]) -> None:
        app.answer.put(HOLD)
        await press("y", "enter")
        assert app.replies == []
        assert app.entry == "y"
        await press(*"yes")
        assert app.entry == "yes"
        await press("enter")
        assert app.replies == [Reply(choice="yes", text="yes")]

    on_foot(test)


def test_typing_on_before_the_refusal_is_there_is_not_lost() -> None:
    async def test(app: Foot, press: Callable[..., Awaitable[None]]) -> None:
        app.answer.put(HOLD)
        await press("y")
        entry = app.answer.query_one(Input)
        entry.post_message(Input.Submitted(entry, "y"))
        entry.value = "yye"
        entry.cursor_position = 3
        await press()
        assert app.entry == "ye"
        await press("s")
        assert app.entry == "yes"

    on_foot(test)


@pytest.mark.parametrize("question", [BY_HAND_READING, CONFIRM])
def test_an_answer_that_came_too_soon_is_said_not_to_be_taken(question: Question) -> None:
    async def test(app: Foot, press: Callable[..., Awaitable[None]]) -> None:
        app.answer.put(question)
        await press("y", "enter")
        assert app.replies == []
        assert app.hint == TOO_SOON
        app.now_s = 1.0
        await press("enter" if question is BY_HAND_READING else "y")
        assert len(app.replies) == 1

    on_foot(test, guard_s=0.5)


@pytest.mark.parametrize(("question", "says"), [(CONFIRM, "Y or N"), (DECIDE, "A, G or M, or Enter")])
def test_a_wrong_key_is_told_which_are_right(question: Question, says: str) -> None:
    async def test(app: Foot, press: Callable[..., Awaitable[None]]) -> None:
        app.answer.put(question)
        await press("x")
        assert app.replies == []
        assert app.hint == f"x answers nothing here: {says}."

    on_foot(test)


def test_a_line_of_choices_breaks_between_two_of_them() -> None:
    choices = tuple(
        Choice(value=value, label=label)
        for value, label in (("take", "Take this reading"), ("end", "It can't be reached"), ("x", "Make safe and stop"))
    )

    async def test(app: Foot, press: Callable[..., Awaitable[None]]) -> None:
        app.answer.put(Question(item="i", kind="trim", title="t", do="d", choices=choices))
        await press()
        shown = str(app.answer.query_one(Choices).content)
        assert len(shown.splitlines()) == 2
        assert all(sum(choice.label in line for line in shown.splitlines()) == 1 for choice in choices)
        assert max(len(line) for line in shown.splitlines()) <= 60

    on_foot(test, size=(60, 24))


@pytest.mark.parametrize(("words", "says"), [((), ""), (("yes",), "Y"), (("yes", "no", "make safe"), "Y, N or M")])
def test_keys_in_words(words: tuple[str, ...], says: str) -> None:
    assert keys_in_words([Choice(value=word, label=word) for word in words]) == says


def test_a_button_called_enter_is_not_named_twice() -> None:
    async def test(app: Foot, press: Callable[..., Awaitable[None]]) -> None:
        app.answer.put(
            Question(item="i", kind="text", title="t", do="d", choices=(Choice(value="done", label="Enter"),))
        )
        await press()
        assert app.hint == "Type, then Enter."

    on_foot(test)
