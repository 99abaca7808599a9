"""How a person answers: choices by key, and an entry where something has to be typed."""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Any, Final, Self

from rich.text import Text
from textual import events
from textual.containers import Vertical
from textual.message import Message
from textual.widgets import Input

from benchkit.procedure.actions import Choice, Question
from benchkit.session.front import Reply
from benchkit.ui.look import safe
from benchkit.ui.widgets.answer_keys import ENTER, typed_on, typed_reply
from benchkit.ui.widgets.choices import Choices, keeps_keys
from benchkit.ui.widgets.words import Words

GUARD_S = 0.3
"""Keys pressed this soon after a question came up were meant for something else."""


TOO_SOON = "Not taken: the question had only just come up. Read it, then press the key again."
"""Said of an answer that came too soon to be meant for the question."""


SPACE_TAKES: Final = ("trim", "probes")
"""Kinds of questions to which the space bar, and so a foot switch that types it, answers that the reading be taken."""

BEGINS_ENTRY: Final = "0123456789+-.oO"
"""With what the reading of a meter begins, overload (OL) too; no choice of a question about probes has these keys."""
BY_HAND_HINT: Final = "Probes on? Type what the meter shows, with its unit; or Enter first."

NOTHING_TO_TAKE: Final = "The space bar takes a reading, and none is to be taken here."


def _ends(choices: tuple[Choice, ...]) -> bool:
    """Whether one of them ends the walk: then no arrow may bring Enter onto it."""
    return any(choice.value == "make safe" for choice in choices)


class Entry(Input):
    """Where something is typed."""

    def blur(self) -> Self:
        """Give the keys away, unless this is shown."""
        return self if keeps_keys(self) else super().blur()


class Answer(Vertical):
    """The foot of every page: hint, entry, choices."""

    class Given(Message):
        """Posted when the person has answered."""

        def __init__(self, reply: Reply) -> None:
            super().__init__()
            self.reply = reply

    def __init__(self, *, clock: Callable[[], float] = time.monotonic, guard_s: float = GUARD_S, **more: Any) -> None:
        super().__init__(**more)
        self._clock = clock
        self._guard_s = guard_s
        self._question: Question | None = None
        self._reason_for: Choice | None = None
        self._half_typed: tuple[str, str, str] | None = None
        self._since = 0.0
        self._held_until = 0.0
        self._hint = Words(classes="answer-hint")
        self._entry = Entry(classes="answer-entry", compact=True, select_on_focus=False)
        self._choices = Choices(classes="answer-choices")
        self._choices.typed_ahead = lambda key: self.type_ahead(key, passed_by_entry=False)
        self._ahead: tuple[str, str] | None = None
        self.stray = ""  # typed while nothing was asked for
        self._coming = False  # the entry has been called for, and does not have the keys yet
        self.by_hand = False
        """A person reads the meter: a figure typed where probes are to be placed begins the entry that follows."""

    def compose(self) -> Any:
        """Lay out the three parts."""
        yield self._hint
        yield self._entry
        yield self._choices

    def on_mount(self) -> None:
        """Begin without a question."""
        self.withdraw()

    @property
    def typing(self) -> bool:
        """Whether the entry is shown."""
        return bool(self._entry.display)

    def put(self, question: Question, refused: str = "", *, stacked: bool = False, arrows: bool = True) -> None:
        """Offer the answers of `question`; `refused` says why the last one could not be used."""
        self._keep_half_typed()
        again = self._question is not None and self._question == question and bool(refused)
        self._question = question
        self._reason_for = None
        self._since = self._clock()
        self.display = True
        types = wants_entry(question)
        if not again or question.kind == "hold":
            self._entry.value = ""
        hint = _hint(question, refused, types)
        if not hint.plain and self._begins_entry(question):
            hint = Text(BY_HAND_HINT)
        self._hint.say(hint)
        self._hint.set_class(bool(refused), "refused")
        self._hint.display = bool(hint.plain)
        self._entry.display = types
        shown = question.choices
        if types:
            shown = tuple(choice for choice in question.choices if not _typed(question, choice))
        usual = question.kind not in ("confirm", "watch")
        can_move = arrows and usual and not _ends(shown)
        space = question.kind in SPACE_TAKES and bool(shown)
        self._choices.offer(shown, stacked=stacked, arrows=can_move, usual=usual, space=space)
        self._choices.display = bool(shown)
        self._focus()
        stray, self.stray = self.stray, ""
        if not refused:
            self._go_on_typing(question)
            stray = self._take_typed_ahead(question) or stray
        self._ahead = None
        if stray.strip():
            lost = f'"{safe(stray.strip())}" was typed before this stood here, and is not taken. {hint.plain}'
            self._complain(lost.strip())

    def _take_typed_ahead(self, question: Question) -> str:
        """Put what was typed before its entry stood there into it, and its Enter; return what belongs nowhere."""
        point, text = self._ahead or ("", "")
        if question.kind != "by hand" or question.point != point:
            return text
        typed, ended, _ = text.partition(ENTER)
        if typed:
            self._entry.value = typed
            self._entry.cursor_position = len(typed)
        if typed.strip() and ended:
            self._submit(typed)
        return ""

    def make_way(self) -> str:
        """Forget what was typed ahead, and return what is still to be said not to have been taken."""
        lost, self.stray = (self._ahead or ("", ""))[1].partition(ENTER)[0] or self.stray, ""
        self._ahead = None
        return lost

    def _late(self, key: events.Key, character: str | None, passed_by_entry: bool) -> bool:
        """Take a key that was on its way to elsewhere when the entry came: it belongs into the entry."""
        elsewhere = self._choices.has_focus and not self._coming
        if not self._entry.display or elsewhere or self._reason_for is not None:
            return False
        if passed_by_entry and character is None:
            return False  # the entry has had it
        if key.key == "enter":
            if not self._too_soon() or self._entry.value.strip():
                self._submit(self._entry.value)
        elif key.key == "backspace":
            self._entry.action_delete_left()
        elif character is not None:
            self._entry.insert_text_at_cursor(character)
        else:
            return False
        return True

    def type_ahead(self, key: events.Key, *, passed_by_entry: bool = True) -> bool:
        """Take a key that begins an entry, or that belongs to one which has been begun and does not stand there yet.

        A key that is no character may have `passed_by_entry` on its way here.
        """
        character = key.character if key.is_printable else None
        if self._question is None:
            if self._ahead is None:
                return self._note_stray(character)
            self._ahead = (self._ahead[0], typed_on(self._ahead[1], key.key, character))
            self._echo()
            return True
        question = self._question
        if question.kind == "by hand" and self._late(key, character, passed_by_entry):
            return True
        if key.key == "space":
            self.take_reading()
            return True
        if not self._begins_entry(question) or character is None or character not in BEGINS_ENTRY:
            return False
        if self._too_soon():
            self._complain(TOO_SOON)
        else:
            self._give(Reply(choice=question.choices[0].value))
            self._ahead = (question.point, character)
            self._echo()
        return True

    def _note_stray(self, character: str | None) -> bool:
        """Keep a figure that is typed while nothing is asked for in mind, to say that it was not taken."""
        if not self.by_hand or character is None or not (self.stray or character in BEGINS_ENTRY):
            return False
        self.stray += character
        return True

    def _echo(self) -> None:
        """Show what has been typed for an entry that does not stand there yet."""
        if self._ahead is not None:
            self.display = True
            self._entry.display = self._choices.display = False
            self._hint.display = True
            self._hint.set_class(False, "refused")
            typed = self._ahead[1].partition(ENTER)[0]
            self._hint.say(f"Typed so far: {safe(typed)}" if typed else "One moment: what is typed now is kept.")

    def _begins_entry(self, question: Question) -> bool:
        return self.by_hand and question.kind == "probes" and bool(question.point) and bool(question.choices)

    def _keep_half_typed(self) -> None:
        if self._question is not None and self._reason_for is not None:
            self._half_typed = (self._question.item, self._reason_for.value, self._entry.value)

    def _go_on_typing(self, question: Question) -> None:
        """Keep a reason that is half typed when the same question comes anew with more to choose from."""
        item, value, text = self._half_typed or ("", "", "")
        choice = next((choice for choice in question.choices if choice.value == value and choice.wants_reason), None)
        if choice is None or item != question.item or question.kind != "decide":
            self._half_typed = None
            return
        self._take(choice)
        self._entry.value = text
        self._entry.cursor_position = len(text)

    def withdraw(self) -> None:
        """Take everything away: there is nothing to answer."""
        self._keep_half_typed()
        self._question = None
        self._reason_for = None
        self._entry.value = ""
        self.display = False
        self._echo()

    def take_focus(self) -> None:
        """Let the keys come here, if there is anything to answer."""
        if self._question is not None:
            self._focus()

    def on_descendant_focus(self, _message: events.DescendantFocus) -> None:
        """Take note that the entry has the keys."""
        self._coming = self._coming and not self._entry.has_focus

    def _focus(self) -> None:
        self._coming = bool(self._entry.display) and not self._entry.has_focus
        (self._entry if self._entry.display else self._choices).focus(scroll_visible=False)

    def _too_soon(self) -> bool:
        now = self._clock()
        return now - self._since < self._guard_s or now < self._held_until

    def hold(self, seconds: float) -> None:
        """Take no key for an answer for a while."""
        self._held_until = self._clock() + seconds

    def take_reading(self) -> None:
        """Take the reading that the question is about, as the space bar or a foot switch wants it."""
        question = self._question
        if question is None:
            return
        if question.kind not in SPACE_TAKES or not question.choices:
            self._complain(NOTHING_TO_TAKE)
        elif self._too_soon():
            self._complain(TOO_SOON)
        else:
            self._take(question.choices[0])

    def on_choices_taken(self, message: Choices.Taken) -> None:
        """Answer, or ask why first."""
        message.stop()
        if self._question is None:
            return
        if self._too_soon():
            self._complain(TOO_SOON)
        else:
            self._take(message.choice)

    def on_choices_refused(self, message: Choices.Refused) -> None:
        """Say which keys answer."""
        message.stop()
        if self._question is not None and not self._too_soon():
            self._complain(message.words)

    def _take(self, choice: Choice) -> None:
        if choice.wants_reason:
            self._reason_for = choice
            self._entry.value = ""
            self._entry.display = True
            self._choices.display = False
            self._hint.display = True
            self._hint.set_class(False, "refused")
            what = f"type {choice.wanted}" if choice.wanted else "why? Type the reason"
            self._hint.say(f"{choice.label}: {what}, Enter keeps it, Esc goes back.")
            self._focus()
            return
        question = self._question
        self._give(Reply(choice=choice.value))
        if question is not None and self._begins_entry(question) and choice == question.choices[0]:
            self._ahead = (question.point, "")
            self._echo()

    def on_input_submitted(self, message: Input.Submitted) -> None:
        """Answer with what was typed."""
        message.stop()
        if self._question is None:
            return
        if self._too_soon():
            self._complain(TOO_SOON)
        else:
            self._submit(message.value)

    def _submit(self, value: str) -> None:
        """Answer with what was typed."""
        question = self._question
        if question is None:
            return
        text = value.strip()
        if self._reason_for is not None:
            if text:
                self._give(Reply(choice=self._reason_for.value, text=text))
            else:
                wanted = self._reason_for.wanted
                needed = f"What is needed is {wanted}" if wanted else "A reason is needed"
                self._complain(f"{needed}; Esc goes back.", value)
            return
        reply = typed_reply(question, text)
        if isinstance(reply, str):
            self._complain(reply, value)
        elif isinstance(reply, Choice):
            self._take(reply)
        else:
            self._give(reply)

    def on_key(self, event: events.Key) -> None:
        """Leave the reason again."""
        if event.key == "escape" and self._reason_for is not None and self._question is not None:
            event.stop()
            self._half_typed = self._reason_for = None
            self.put(self._question)

    def _complain(self, words: str, typed: str = "") -> None:
        """Say why an answer was not taken; what was `typed` stays to be seen, and the next typing replaces it."""
        if typed and self._entry.value == typed:
            self._entry.select_all()
        elif typed and self._entry.value.startswith(typed):  # typed on meanwhile
            self._entry.value = self._entry.value.removeprefix(typed)
            self._entry.cursor_position = len(self._entry.value)
        self._hint.display = True
        self._hint.set_class(True, "refused")
        self._hint.say(words)
        self.app.bell()

    def _give(self, reply: Reply) -> None:
        self._question = None
        self._half_typed = None
        self.withdraw()
        self.post_message(self.Given(reply))


def wants_entry(question: Question) -> bool:
    """Return whether something is typed in answer to `question`."""
    return question.kind in ("text", "hold", "by hand")


def _typed(question: Question, choice: Choice) -> bool:
    """Whether `choice` is given by typing instead of by key."""
    if question.kind == "hold":
        return choice.value == "yes"
    return bool(question.choices) and choice == question.choices[0]


def _hint(question: Question, refused: str, types: bool) -> Text:
    if refused:
        return Text(safe(refused))
    more = " Tab: other answers." if len(question.choices) > 1 else ""
    if question.kind == "hold":
        return Text(f"Type yes in full, then Enter; nothing less passes.{more}")
    if not types:
        return Text("")
    label = safe(question.choices[0].label) if question.choices else "done"
    enter = "Enter" if label.casefold() == "enter" else f"Enter ({label})"
    if question.point:
        return Text(f"Type what the meter shows, with its unit, then {enter}.{more}")
    if question.kind == "by hand":
        only = len(question.choices) == 1
        return Text(
            f"When it is done: {enter}, nothing typed." if only else f"Type what is asked for, then {enter}.{more}"
        )
    return Text(f"Type, then {enter}.{more}")
