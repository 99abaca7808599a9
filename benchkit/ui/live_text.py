"""A watched reading in lines of text: one when something has changed, and never more than one a second."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Final

from benchkit.session.front import LiveView
from benchkit.ui.widgets.trim_words import advice_words, mood_look, plain_reading

LEAST_S: Final = 1.0
"""Between two lines (s)."""

STILL_S: Final = 10.0
"""Between two lines while only the figures move (s)."""

MOVED: Final = 0.05
"""A reading that has moved by this share of the distance between its limits has changed."""


class LiveLines:
    """Decides what is worth a line.

    Parameters
    ----------
    clock : callable
        Tells the time (s).
    """

    def __init__(self, clock: Callable[[], float]) -> None:
        self._clock = clock
        self._said_s = -math.inf
        self._words: tuple[str, ...] = ()
        self._value: float | None = None
        self._captured = 0

    def taken(self, live: LiveView) -> bool:
        """Return whether a reading was taken by itself since the last picture."""
        captured, self._captured = self._captured, live.captured
        return live.captured > captured

    def line(self, live: LiveView, busy: str = "", remaining_s: float | None = None, *, placing: bool = False) -> str:
        """Return a line for a picture of the reading; "" where nothing is to be said now.

        While the probes are being placed (`placing`) there is nothing to turn: only a lost reading is told as a mood.
        """
        now = self._clock()
        since = now - self._said_s
        words = (live.point, *_mood_and_advice(live, placing), live.capture.partition(" ")[0])
        if since < LEAST_S:
            return ""
        if words == self._words and since < STILL_S and not self._moved(live):
            return ""
        self._said_s, self._words, self._value = now, words, live.value
        return live_line(live, busy, remaining_s, placing=placing)

    def _moved(self, live: LiveView) -> bool:
        if live.value is None or self._value is None:
            return live.value is not self._value
        span = live.high - live.low
        span = span if math.isfinite(span) and span > 0.0 else abs(self._value)
        return abs(live.value - self._value) > MOVED * span


def _mood_and_advice(live: LiveView, placing: bool) -> tuple[str, str]:
    mood = mood_look(live).word
    if placing:
        return mood if live.mood == "gone" else "", live.advice
    return mood, advice_words(live)


def live_line(live: LiveView, busy: str = "", remaining_s: float | None = None, *, placing: bool = False) -> str:
    """Return everything that is known of a watched reading in one line.

    Examples
    --------
    >>> live_line(LiveView(point="emitter.upper.1", unit="V", value=0.016, text="16.00 mV", low=0.018, high=0.022,
    ...                    target=0.02, age_s=0.0, inside=False, advice="a quarter turn anticlockwise",
    ...                    rate_text="rising 0.12 mV/min"))
    'emitter.upper.1 16.00 mV, TOO LOW: a quarter turn anticlockwise; rising 0.12 mV/min'
    """
    mood, advice = _mood_and_advice(live, placing)
    reading = plain_reading(live)
    head = f"{live.point} {reading}, {mood}" if mood else f"{live.point} {reading}"
    left = "" if remaining_s is None else f"about {remaining_s:.0f} s left"
    parts = [f"{head}: {advice}" if advice else head, live.rate_text, live.settles_text, live.capture]
    parts += [part for part in (busy.rstrip("."), left) if part]
    return "; ".join(part for part in parts if part)
