"""Something that goes on by itself: a rail on its way down, a stage that comes to rest."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import replace
from typing import Any

from rich.text import Text
from textual.containers import Container

from benchkit.procedure.actions import Question
from benchkit.session.front import View
from benchkit.ui.layout import FULL, ROOMY
from benchkit.ui.look import CARE, DISC, DOWN, INK, STRONG, safe
from benchkit.ui.pages.base import Page
from benchkit.ui.widgets.card import progress_words
from benchkit.ui.widgets.digits import BigReading
from benchkit.ui.widgets.live_panel import LivePanel
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


class SoakPage(Page):
    """How the soak stands, the watched reading with where it heads for, answer; it ends by itself."""

    def __init__(self, guard_s: float, *, clock: Callable[[], float] = time.monotonic, **more: Any) -> None:
        super().__init__(guard_s, **more)
        self._stands = Words(classes="soak-stands")
        self._panel = LivePanel(clock=clock, classes="live-panel")

    def compose(self) -> Any:
        """Lay out from how it stands to the answer."""
        yield self._stands
        yield self._panel
        yield self.answer

    def put(self, question: Question, refused: str) -> None:
        """Put the question; going on with the soak needs no key."""
        super().put(question, refused)
        self.answer.put(replace(question, choices=question.choices[1:]), refused)

    def say(self, view: View) -> None:
        """Show how it stands now."""
        columns = self.app.size.width
        with_ring = FULL[0] <= columns < ROOMY[0]  # it tells the share already
        words = Text(safe(view.busy or "The stage comes to rest."), style=f"bold {STRONG}")
        share = None if with_ring else _share(view)
        bar = Text(progress_words(share, view.remaining_s, width=10 if columns >= ROOMY[0] else 4), style=INK)
        parts = (words, bar) if columns >= FULL[0] else (bar, words)
        self._stands.say(Text("  ").join(part for part in parts if part.plain))
        self._panel.say(view.live)

    def age(self) -> None:
        """Let the reading grow old in sight."""
        self._panel.age()

    def mark_overflow(self) -> None:
        """There is no sheet here."""


def _share(view: View) -> float | None:
    live = view.live
    return live.settled_share if live is not None and live.settled_share is not None else view.busy_share


def is_soak(view: View) -> bool:
    """Whether a picture shows a stage that comes to rest by itself."""
    live = view.live
    if live is None or not view.busy:
        return False
    return live.settled_share is not None or bool(live.settles_text) or bool(live.predicted)
