"""The trim: the screw in one hand, eyes across the bench, the reading as large as it goes."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import replace
from typing import Any

from rich.text import Text

from benchkit.procedure.actions import Question
from benchkit.session.front import Reply, View
from benchkit.ui.look import QUIET
from benchkit.ui.pages.base import Page
from benchkit.ui.widgets.answer import Answer
from benchkit.ui.widgets.live_panel import LivePanel
from benchkit.ui.widgets.trim_words import TURN_KEYS, TURNS
from benchkit.ui.widgets.words import Words


class TrimPage(Page):
    """Sentence, the watched reading with its advice, answer."""

    def __init__(self, guard_s: float, *, clock: Callable[[], float] = time.monotonic, **more: Any) -> None:
        super().__init__(guard_s, **more)
        self._rehearsal = False
        self._item = ""
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
        shown = tuple(choice for choice in question.choices if choice.value != "turn")
        if shown != question.choices:
            self.answer.put(replace(question, choices=shown), refused, arrows=False)

    def say(self, view: View) -> None:
        """Show the newest reading."""
        if self.question is not None or view.live is None or view.busy:
            super().say(view)  # between two turns of the screw the instruction stays where it is
        self._rehearsal = view.kind == "rehearsal"
        self.set_class(not self._rehearsal, "walking")
        self._turns.say(Text(TURN_KEYS, style=QUIET))
        self._panel.say(view.live)

    def age(self) -> None:
        """Let the reading grow old in sight."""
        self._panel.age()

    def on_key(self, event: Any) -> None:
        """Turn the screw of a rehearsal."""
        turns = TURNS.get(event.key)
        if turns is None or not self._rehearsal or self.question is None:
            return
        event.stop()
        event.prevent_default()
        self.post_message(Answer.Given(Reply(choice="turn", turns=turns)))
