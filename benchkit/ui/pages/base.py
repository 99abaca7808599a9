"""What all pages of a walk share."""

from __future__ import annotations

from typing import Any

from textual.containers import Vertical

from benchkit.procedure.actions import Question
from benchkit.session.front import View
from benchkit.ui.widgets.answer import Answer
from benchkit.ui.widgets.card import Card


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

    def put(self, question: Question, refused: str) -> None:
        """Put a question."""
        self.question = question
        self.card.put(question)
        self.answer.put(question, refused)

    def withdraw(self) -> None:
        """Take the question away."""
        self.question = None
        self.answer.withdraw()

    def say(self, view: View) -> None:
        """Show a picture of the walk."""
        if self.question is None:
            self.card.wait(view.busy, view.busy_share, view.remaining_s)

    def turn_over(self, rows: int) -> None:
        """Move what is longer than its room."""
        self.card.scroll_relative(y=rows, animate=False)
