"""The trim: the screw in one hand, eyes across the bench, the reading as large as it goes."""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Any

from rich.table import Table
from rich.text import Text

from benchkit.procedure.actions import Question
from benchkit.session.front import LiveView, Reply, View
from benchkit.ui.look import CARE, DISC, DOWN, INK, QUIET, STRONG, UP, safe
from benchkit.ui.pages.base import Page
from benchkit.ui.widgets.answer import Answer
from benchkit.ui.widgets.digits import BigReading
from benchkit.ui.widgets.gauge import Gauge, Gauged
from benchkit.ui.widgets.trend import Trend
from benchkit.ui.widgets.trim_words import STALE_AFTER_S, TURNS, figure, where
from benchkit.ui.widgets.words import Words


class TrimPage(Page):
    """Sentence, big reading, where it lies, how it moved, answer."""

    def __init__(self, guard_s: float, *, clock: Callable[[], float] = time.monotonic, **more: Any) -> None:
        super().__init__(guard_s, **more)
        self._clock = clock
        self._live: LiveView | None = None
        self._received_s = 0.0
        self._rehearsal = False
        self._reading = BigReading(classes="trim-reading")
        self._where = Words(classes="trim-where")
        self._gauge = Gauge(classes="trim-gauge")
        self._trend = Trend(classes="trim-trend")
        self._turns = Words(classes="trim-turns")

    def compose(self) -> Any:
        """Lay out from what to do to the answer."""
        yield self.card
        yield self._reading
        yield self._where
        yield self._gauge
        yield self._trend
        yield self._turns
        yield self.answer

    def put(self, question: Question, refused: str) -> None:
        """Put the question; the turn of a rehearsal is answered by arrow keys instead of by a choice."""
        super().put(question, refused)
        shown = tuple(choice for choice in question.choices if choice.value != "turn")
        if shown != question.choices:
            self.answer.put(Question(**{**question.__dict__, "choices": shown}), refused)

    def say(self, view: View) -> None:
        """Show the newest reading."""
        super().say(view)
        self._rehearsal = view.kind == "rehearsal"
        self._turns.display = self._rehearsal
        self._turns.say(
            Text("the screw: arrow left/right a little, up/down a quarter turn, page keys a whole turn", style=QUIET)
        )
        if view.live is not None and view.live is not self._live:
            self._live = view.live
            self._received_s = self._clock()
        self.age()

    def age(self) -> None:
        """Draw the reading with its age; called also while nothing new comes."""
        live = self._live
        if live is None:
            self._reading.say("", "")
            return
        age_s = live.age_s + self._clock() - self._received_s
        stale = age_s > STALE_AFTER_S
        self._reading.say(live.text, f"STALE {age_s:.0f} s" if stale else "", stale)
        row = Table.grid(expand=True)
        row.add_column(ratio=1)
        row.add_column(justify="right")
        side = where(live)
        if stale:
            words = Text(" no fresh reading: do not turn ", style=f"bold reverse {CARE}")
        elif side == "inside":
            words = Text(f" {DISC} INSIDE the limits ", style=f"bold reverse {STRONG}")
        elif side == "below":
            words = Text(f" {UP} too low: MORE bias ", style=f"bold {CARE}")
        elif side == "above":
            words = Text(f" {DOWN} too high: LESS bias ", style=f"bold {CARE}")
        else:
            words = Text(" no number ", style=f"bold {CARE}")
        target = Text(f"target {safe(figure(live.target, live.unit))}   at {safe(live.point)}", style=INK)
        row.add_row(words, target)
        self._where.say_drawn((side, stale, live.target, live.point), row)
        self._gauge.say(
            Gauged(
                value=live.value,
                low=live.low,
                high=live.high,
                target=live.target,
                low_text=figure(live.low, live.unit),
                high_text=figure(live.high, live.unit),
            )
        )
        self._trend.say(live)

    def on_key(self, event: Any) -> None:
        """Turn the screw of a rehearsal."""
        turns = TURNS.get(event.key)
        if turns is None or not self._rehearsal or self.question is None:
            return
        event.stop()
        event.prevent_default()
        self.post_message(Answer.Given(Reply(choice="turn", turns=turns)))
