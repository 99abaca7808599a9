"""The trim: the screw in one hand, eyes across the bench, the reading as large as it goes."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import replace
from typing import Any

from rich.table import Table
from rich.text import Text
from textual.containers import Container

from benchkit.procedure.actions import Question
from benchkit.session.front import LiveView, Reply, View
from benchkit.ui.look import CARE, DISC, DOWN, INK, QUIET, STRONG, UP, safe
from benchkit.ui.pages.base import Page
from benchkit.ui.widgets.answer import Answer
from benchkit.ui.widgets.digits import BigReading
from benchkit.ui.widgets.gauge import Gauge, Gauged
from benchkit.ui.widgets.trend import Trend
from benchkit.ui.widgets.trim_words import STALE_AFTER_S, TURN_KEYS, TURNS, figure, in_step, where
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
        yield self._where
        yield Container(self._reading, self._trend, classes="trim-figures")
        yield self._gauge
        yield self._turns
        yield self.answer

    def put(self, question: Question, refused: str) -> None:
        """Put the question; the turn of a rehearsal is answered by arrow keys instead of by a choice."""
        super().put(question, refused)
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
        figures = live.text if live.value is None else in_step(live.value, live.target, live.unit)
        self._reading.say(figures, f"STALE {age_s:.0f} s" if stale else "", stale)
        row = Table.grid(expand=True)
        row.add_column(no_wrap=True, overflow="crop")
        row.add_column(justify="right", no_wrap=True, overflow="crop")
        side = where(live)
        if stale:
            words = Text.assemble((" no fresh reading: do not turn ", f"bold reverse {CARE}"))
        elif side == "inside":
            words = Text.assemble((f" {DISC} INSIDE the limits ", f"bold reverse {STRONG}"))
        elif side == "below":
            words = Text(f" {UP} too low: MORE bias ", style=f"bold {CARE}")
        elif side == "above":
            words = Text(f" {DOWN} too high: LESS bias ", style=f"bold {CARE}")
        else:
            words = Text(" no number ", style=f"bold {CARE}")
        narrow = self.size.width < 70
        point = "" if narrow else f"   at {safe(live.point)}"
        target = Text(f"target {safe(figure(live.target, live.unit))}{point}", style=INK, no_wrap=True)
        row.add_row(words, target)
        self._where.say_drawn((side, stale, live.target, live.point, narrow), row)
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
