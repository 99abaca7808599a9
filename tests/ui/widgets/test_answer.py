"""The foot of a page, on a screen: what becomes of keys that are early, wrong or typed after a refusal."""

from __future__ import annotations

import asyncio
from collections.abc import Awaitable, Callable

import pytest
from textual import events
from textual.app import App, ComposeResult
from textual.widgets import Input

from benchkit.procedure.actions import Choice, Question
from benchkit.session.front import Reply
from benchkit.ui.widgets.answer import BY_HAND_HINT, TOO_SOON, Answer
from benchkit.ui.widgets.answer_keys import keys_in_words
from benchkit.ui.widgets.choices import Choices
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

    def on_key(self, event: events.Key) -> None:
        self.answer.type_ahead(event)

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


def test_a_figure_that_is_typed_into_a_choice_takes_none_of_them() -> None:
    async def test(app: Foot, press: Callable[..., Awaitable[None]]) -> None:
        app.answer.put(DECIDE)
        await press(*"47.68", "space", *"mV")
        assert app.replies == [], "the unit's m is no answer"
        assert app.hint == '"47.68 mV" answers nothing here. Enter clears it; then A, G or M, or Enter.'
        await press("enter")
        assert app.replies == []
        assert app.hint == '"47.68 mV" is not taken: A, G or M, or Enter.'
        await press("m")
        assert app.replies == [Reply(choice="make safe")]

    on_foot(test)


def test_backspace_takes_a_figure_back() -> None:
    async def test(app: Foot, press: Callable[..., Awaitable[None]]) -> None:
        app.answer.put(DECIDE)
        await press("4", "backspace", "m")
        assert app.replies == [Reply(choice="make safe")]

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


PLACE = Question(
    item="upper",
    kind="probes",
    title="Upper emitter drop",
    do="Clip on.",
    point="emitter.upper.1",
    choices=(Choice(value="done", label="done"), Choice(value="make safe", label="make safe", wants_reason=True)),
)


def test_a_figure_typed_while_probes_are_placed_begins_the_entry_that_follows() -> None:
    async def test(app: Foot, press: Callable[..., Awaitable[None]]) -> None:
        app.answer.by_hand = True
        app.answer.put(PLACE)
        await press()
        assert app.hint == BY_HAND_HINT
        await press("1")
        assert app.replies == [Reply(choice="done")]
        await press("2", ".", "9", "backspace", "3", "m", "V")  # before the entry is there
        app.answer.put(BY_HAND_READING)
        await press()
        assert app.entry == "12.3mV"
        await press("enter")
        assert app.replies[1:] == [Reply(choice="done", text="12.3mV")]

    on_foot(test)


@pytest.mark.parametrize(("first", "before"), [((), 1), ((), 4), ((), 8), (("enter",), 0), (("enter",), 5)])
def test_a_burst_keeps_its_order_wherever_the_entry_comes(first: tuple[str, ...], before: int) -> None:
    keys = ("0", "full_stop", "1", "5", "space", "u", "V", "enter")

    async def test(app: Foot, press: Callable[..., Awaitable[None]]) -> None:
        app.answer.by_hand = True
        app.answer.put(PLACE)
        await press(*first)
        await press(*keys[:before])
        assert app.replies == [Reply(choice="done")]
        app.answer.put(BY_HAND_READING)
        await press(*keys[before:])
        assert app.replies[1:] == [Reply(choice="done", text="0.15 uV")]

    on_foot(test)


def test_keys_that_still_wait_at_the_choices_when_the_entry_comes_go_into_it() -> None:
    async def test(app: Foot, press: Callable[..., Awaitable[None]]) -> None:
        app.answer.by_hand = True
        app.answer.put(PLACE)
        await press("0")
        choices = app.answer.query_one(Choices)
        app.answer.put(BY_HAND_READING)
        for key, character in ((".", "."), ("1", "1"), ("space", " "), ("V", "V"), ("enter", "\r")):
            choices.post_message(events.Key(key, character))
        await press()
        assert app.replies[1:] == [Reply(choice="done", text="0.1 V")]

    on_foot(test)


def test_a_figure_typed_while_nothing_is_asked_is_said_not_to_be_taken() -> None:
    async def test(app: Foot, press: Callable[..., Awaitable[None]]) -> None:
        app.answer.by_hand = True
        app.answer.withdraw()
        for character in "1.5 mV":
            assert app.answer.type_ahead(events.Key("space" if character == " " else character, character))
        app.answer.put(PLACE)
        await press()
        assert app.hint == f'"1.5 mV" was typed before this stood here, and is not taken. {BY_HAND_HINT}'
        assert app.replies == []

    on_foot(test)


def test_an_empty_yes_says_what_to_type() -> None:
    async def test(app: Foot, press: Callable[..., Awaitable[None]]) -> None:
        app.answer.put(HOLD)
        await press("enter")
        assert app.hint == "Nothing was typed yet. Only the whole word yes, then Enter, passes this point."

    on_foot(test)


@pytest.mark.parametrize(("by_hand", "key"), [(False, "1"), (True, "x")])
def test_no_other_key_and_no_meter_of_its_own_begins_an_entry(by_hand: bool, key: str) -> None:
    async def test(app: Foot, press: Callable[..., Awaitable[None]]) -> None:
        app.answer.by_hand = by_hand
        app.answer.put(PLACE)
        await press(key)
        assert app.replies == []
        assert "answers nothing here" in app.hint

    on_foot(test)


def test_what_was_typed_ahead_goes_into_no_other_entry() -> None:
    async def test(app: Foot, press: Callable[..., Awaitable[None]]) -> None:
        app.answer.by_hand = True
        app.answer.put(PLACE)
        await press("1")
        app.answer.put(HOLD)
        app.answer.put(BY_HAND_READING)
        await press()
        assert app.entry == ""

    on_foot(test)


def test_a_late_word_of_having_been_hidden_takes_no_keys_from_the_next_question() -> None:
    async def test(app: Foot, press: Callable[..., Awaitable[None]]) -> None:
        for question in (CONFIRM, BY_HAND_READING, CONFIRM):
            app.answer.withdraw()
            app.answer.put(question)
            await press()
            focused = app.focused
            assert isinstance(focused, Input if question is BY_HAND_READING else Choices)
            focused.blur()  # what the toolkit does when it hears of it
            assert app.focused is focused
        app.answer.withdraw()
        await press()
        assert app.focused is None

    on_foot(test)
