"""What all pages of a walk share."""

from __future__ import annotations

from typing import Any, Final

from textual.containers import Vertical, VerticalScroll

from benchkit.procedure.actions import Question
from benchkit.session.front import View
from benchkit.ui.look import DOWN, UP
from benchkit.ui.widgets.answer import Answer
from benchkit.ui.widgets.card import Card

MORE: Final = f"{UP}{DOWN} arrow keys: more of the sheet"


class Page(Vertical):
    """One kind of moment in a walk.

    Parameters
    ----------
    guard_s : float
        How long after a question came up keys are not taken for an answer (s).
    """

    def __init__(self, guard_s: float, **more: Any) -> None:
        super().__init__(**more)
        self.card = Card(classes="card")
        self.answer = Answer(classes="answer", guard_s=guard_s)
        self.question: Question | None = None
        self.by_hand = False

    def put(self, question: Question, refused: str) -> None:
        """Put a question."""
        self.question = question
        self.answer.by_hand = self.by_hand
        self.card.put(question)
        self.answer.put(question, refused)

    def withdraw(self) -> None:
        """Take the question away."""
        self.question = None
        self.answer.withdraw()

    def take_key(self, key: str) -> bool:
        """Take a key that means something on this page, whoever has the keys; returns whether it does."""
        return False

    def turn_away(self) -> None:
        """Make way for another page."""
        self.withdraw()

    def say(self, view: View) -> None:
        """Show a picture of the walk."""
        if self.question is None:
            self.card.wait(view.busy, view.busy_share, view.remaining_s)
        else:
            self.card.aim(view.aim)

    def age(self) -> None:
        """Let a watched reading grow old in sight; called also while nothing new comes."""

    @property
    def sheet(self) -> VerticalScroll:
        """The part that may be longer than its room."""
        return self.card

    def mark_overflow(self) -> None:
        """Say that there is more to read than fits, and how to come to it."""
        title = MORE if self.sheet.max_scroll_y > 0 else ""
        if self.answer.border_title != title:
            self.answer.border_title = title

    def turn_over(self, rows: int) -> None:
        """Move what is longer than its room."""
        self.sheet.scroll_relative(y=rows, animate=False)
