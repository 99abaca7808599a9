"""Something that goes on by itself: a rail on its way down, or a meter that needs its time."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

from rich.text import Text
from textual.containers import Container

from benchkit.procedure.actions import Question
from benchkit.session.front import View
from benchkit.ui.look import CARE, DISC, DOWN, INK, STRONG, safe
from benchkit.ui.pages.base import Page
from benchkit.ui.widgets.card import progress_words
from benchkit.ui.widgets.digits import BigReading
from benchkit.ui.widgets.words import Words


class WatchPage(Page):
    """Sheet, how it stands, the reading as large as it goes, answer."""

    def __init__(self, guard_s: float, **more: Any) -> None:
        super().__init__(guard_s, **more)
        self._stands = Words(classes="watch-stands")
        self._reading = BigReading(classes="watch-reading")
        self._figures = Container(self._reading, classes="watch-figures")

    def compose(self) -> Any:
        """Lay out from what to do to the answer."""
        yield self.card
        yield self._stands
        yield self._figures
        yield self.answer

    def put(self, question: Question, refused: str) -> None:
        """Put the question; going on watching needs no key."""
        super().put(question, refused)
        self.answer.put(replace(question, choices=question.choices[1:]), refused)

    def say(self, view: View) -> None:
        """Show how it stands now."""
        super().say(view)
        live = view.live
        self._figures.display = live is not None
        if live is not None:
            self._reading.say(live.text, live.point)
        low = live is not None and live.inside
        alarm = view.busy_share is None and view.remaining_s is None
        shape, style = (DISC, STRONG) if low else (DOWN, CARE if alarm else INK)
        text = Text.assemble((f"{shape} {safe(view.busy)}", f"bold {style}"))
        bar = progress_words(view.busy_share, view.remaining_s, width=16)
        if bar:
            text.append(f"  {bar}", style=INK)
        self._stands.say(text)
