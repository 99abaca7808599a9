"""A watched reading for eyes across the bench: what is going on, the reading, where it heads for, how it came there."""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Any, Final

from rich.table import Table
from rich.text import Text
from textual.containers import Container, Vertical

from benchkit.session.front import LiveView
from benchkit.ui.look import CARE, FAIL, INK, PASS, QUIET, STRONG, safe
from benchkit.ui.widgets.digits import BigReading
from benchkit.ui.widgets.ring import Ring
from benchkit.ui.widgets.trend import Trend
from benchkit.ui.widgets.trim_words import (
    SHORT_WORDS,
    STALE_AFTER_S,
    Tone,
    advice_words,
    in_step,
    mood_look,
    ring_look,
    target_in_steps,
    target_words,
)
from benchkit.ui.widgets.words import Words

TONE_STYLES: Final[dict[Tone, str]] = {
    "calm": f"bold {INK}",
    "turn": f"bold reverse {CARE}",
    "good": f"bold reverse {PASS}",
    "alarm": f"bold reverse {FAIL}",
}
NARROW: Final = 70
"""Below so many columns the word of a mood makes room for the advice, but for the side and for an alarm."""


class LivePanel(Vertical):
    """Mood and advice, reading beside its ring, facts, and the picture of the last minutes and the next."""

    def __init__(self, *, clock: Callable[[], float] = time.monotonic, **more: Any) -> None:
        super().__init__(**more)
        self._clock = clock
        self._live: LiveView | None = None
        self._received_s = 0.0
        self._mood = Words(classes="live-mood")
        self._reading = BigReading(classes="live-reading")
        self._ring = Ring(classes="live-ring")
        self._facts = Words(classes="live-facts")
        self._trend = Trend(classes="live-trend")

    def compose(self) -> Any:
        """Lay out from what is going on to what went before."""
        yield self._mood
        yield Container(self._reading, self._ring, classes="live-figures")
        yield self._facts
        yield self._trend

    def say(self, live: LiveView | None) -> None:
        """Take the newest reading; None: there is none to show any more."""
        if live is not None and live is not self._live:
            self._live = live
            self._received_s = self._clock()
        self.age()

    def forget(self) -> None:
        """Begin anew: what was shown belonged to something else."""
        self._live = None
        self._trend.say(None)

    def age(self) -> None:
        """Draw the reading with its age; called also while nothing new comes."""
        live = self._live
        if live is None:
            self._reading.say("", "")
            return
        age_s = live.age_s + self._clock() - self._received_s
        stale = age_s > STALE_AFTER_S
        figures = live.text if live.value is None else in_step(live.value, live.target, live.unit)
        self._reading.say(figures, f"STALE {age_s:.0f} s" if stale else "", stale, target_in_steps(live))
        self._say_mood(live, stale)
        self._say_ring(live, stale)
        self._say_facts(live, stale)
        self._trend.say(live)

    def _say_mood(self, live: LiveView, stale: bool) -> None:
        look, advice = mood_look(live, stale), advice_words(live, stale)
        narrow = self.app.size.width < NARROW
        word = SHORT_WORDS.get(look.word, look.word if look.tone == "alarm" else "") if narrow and advice else look.word
        word = f" {word}" if word else ""
        style = f"bold {STRONG}" if look.tone != "alarm" else f"bold {FAIL}"
        text = Text.assemble((f" {look.shape}{word} ", TONE_STYLES[look.tone]), (f"  {safe(advice)}", style))
        self._mood.say(text)
        self._mood.set_class(look.tone == "alarm", "alarm")

    def _say_ring(self, live: LiveView, stale: bool) -> None:
        ring = ring_look(live, stale)
        self._ring.set_class(ring is None, "empty-ring")
        if ring is not None:
            self._ring.say(ring.share, ring.sense, ring.centre, ring.tone)

    def _say_facts(self, live: LiveView, stale: bool) -> None:
        narrow = self.app.size.width < NARROW
        rate = "" if stale else live.rate_text
        settles = "" if stale else live.settles_text
        capture = "" if stale else live.capture
        if narrow:
            more = capture or settles or rate
            self._facts.say(Text(safe(f"{target_words(live)}\n{more}"), style=INK, no_wrap=True))
            return
        key = (target_words(live), rate, settles, capture, live.point)
        table = Table.grid(expand=True)
        table.add_column(ratio=1, no_wrap=True, overflow="crop")
        table.add_column(justify="right", no_wrap=True, overflow="crop")
        table.add_row(
            Text.assemble((safe(key[0]), INK), (f"  {safe(live.point)}", QUIET)), Text(safe(rate), style=f"bold {INK}")
        )
        table.add_row(Text(safe(settles), style=f"bold {CARE}"), Text(safe(capture), style=f"bold {PASS}"))
        self._facts.say_drawn(key, table)
