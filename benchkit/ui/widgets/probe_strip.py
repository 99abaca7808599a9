"""What the meter reads while the probes are being placed: large, with how far it is from being taken by itself."""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Any

from rich.text import Text
from textual.containers import Horizontal

from benchkit.session.front import LiveView
from benchkit.ui.look import FAIL, INK, PASS, QUIET, STRONG, safe
from benchkit.ui.widgets.digits import BigReading
from benchkit.ui.widgets.trim_words import MOOD_LOOKS, STALE_AFTER_S, plain_reading
from benchkit.ui.widgets.words import Words


class ProbeStrip(Horizontal):
    """The reading of the moment beside what becomes of it."""

    def __init__(self, *, clock: Callable[[], float] = time.monotonic, **more: Any) -> None:
        super().__init__(**more)
        self._clock = clock
        self._live: LiveView | None = None
        self._received_s = 0.0
        self._next = ""
        self._reading = BigReading(classes="probe-reading")
        self._words = Words(classes="probe-words")
        self.display = False

    def compose(self) -> Any:
        """Lay out reading and words."""
        yield self._reading
        yield self._words

    def say(self, live: LiveView | None, next_probe: str) -> None:
        """Show the newest reading; without one, only where the probes go next."""
        if live is not self._live:
            self._live, self._received_s = live, self._clock()
        self._next = next_probe
        self.display = live is not None or bool(next_probe)
        self._reading.display = live is not None
        self.set_class(live is None, "without-reading")
        self.age()

    def age(self) -> None:
        """Let the reading grow old in sight."""
        if not self.display:
            return
        live = self._live
        text = Text()
        if live is not None:
            age_s = live.age_s + self._clock() - self._received_s
            stale = age_s > STALE_AFTER_S
            self._reading.say(safe(plain_reading(live)), "", stale)
            if stale:
                text.append(f"▒▒▒ no fresh reading for {age_s:.0f} s\n", style=f"bold {FAIL}")
            else:
                text.append_text(_words(live))
        if self._next:
            text.append("next probes: ", style=QUIET)
            text.append(safe(self._next), style=f"bold {INK}")
        self._words.say(text)


def _words(live: LiveView) -> Text:
    text = Text()
    gone = live.mood == "gone"
    if gone:
        text.append(f"{MOOD_LOOKS['gone'].shape} {MOOD_LOOKS['gone'].word}\n", style=f"bold {FAIL}")
    if live.capture:
        text.append(f"{safe(live.capture)}\n", style=f"bold {STRONG if gone else PASS}")
    if live.advice:
        text.append(f"{safe(live.advice)}\n", style=f"bold {STRONG}")
    return text
