"""The trim: the screw in one hand, eyes across the bench, the reading as large as it goes."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import replace
from typing import Any, Final

from rich.text import Text
from textual import events

from benchkit.procedure.actions import Question
from benchkit.session.front import Reply, View
from benchkit.ui.look import INK, QUIET
from benchkit.ui.pages.base import Page
from benchkit.ui.widgets.answer import Answer
from benchkit.ui.widgets.live_panel import LivePanel
from benchkit.ui.widgets.trim_words import TURN_KEYS, TURNS, owed_words
from benchkit.ui.widgets.words import Words

LEAST_TURN: Final = 0.5 * min(abs(turns) for turns in TURNS.values())


class TrimPage(Page):
    """Sentence, the watched reading with its advice, answer.

    A key that turns the screw of a rehearsal while the one before is still carried out is kept, and carried out next.
    """

    def __init__(self, guard_s: float, *, clock: Callable[[], float] = time.monotonic, **more: Any) -> None:
        super().__init__(guard_s, **more)
        self._rehearsal = False
        self._item = ""
        self._turning = False  # a turn has been given for the answer of the question that stands
        self._owed = 0.0  # turns that are still to be made
        self._panel = LivePanel(clock=clock, classes="live-panel")
        self._turns = Words(classes="trim-turns")

    def compose(self) -> Any:
        """Lay out from what to do to the answer."""
        yield self.card
        yield self._panel
        yield self._turns
        yield self.answer

    def put(self, question: Question, refused: str) -> None:
        """Put the question; the turn of a rehearsal is answered by arrow keys instead of by a choice."""
        super().put(question, refused)
        if question.item != self._item:
            self._item = question.item
            self._panel.forget()
            self._owed = 0.0
        shown = tuple(choice for choice in question.choices if choice.value != "turn")
        if shown != question.choices:
            self.answer.put(replace(question, choices=shown), refused, arrows=False)
        owed, self._owed, self._turning = self._owed, 0.0, False
        if abs(owed) > LEAST_TURN and self._rehearsal:
            self._turn(owed)

    def turn_away(self) -> None:
        """Make way for another page; what was still to be turned belonged to this one."""
        super().turn_away()
        self._owed = 0.0

    def _turn(self, turns: float) -> None:
        self._turning = True
        self.post_message(Answer.Given(Reply(choice="turn", turns=turns)))

    def say(self, view: View) -> None:
        """Show the newest reading."""
        if self.question is not None or view.live is None or view.busy:
            super().say(view)  # between two turns of the screw the instruction stays where it is
        self._rehearsal = view.kind == "rehearsal"
        self.set_class(not self._rehearsal, "walking")
        if view.live is None:
            self._owed = 0.0
        self._say_turns()
        self._panel.say(view.live)

    def _say_turns(self) -> None:
        if abs(self._owed) > LEAST_TURN:
            self._turns.say(Text(owed_words(self._owed), style=f"bold {INK}"))
        else:
            self._turns.say(Text(TURN_KEYS, style=QUIET))

    def age(self) -> None:
        """Let the reading grow old in sight."""
        self._panel.age()

    def on_key(self, event: events.Key) -> None:
        """Turn the screw of a rehearsal."""
        if self.take_key(event.key):
            event.stop()
            event.prevent_default()

    def take_key(self, key: str) -> bool:
        """Turn the screw of a rehearsal, or keep in mind to do so."""
        turns = TURNS.get(key)
        if turns is None or not self._rehearsal:
            return False
        if self.question is None or self._turning:
            self._owed += turns
            self._say_turns()
        else:
            self._turn(turns)
        return True
