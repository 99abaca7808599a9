"""How the stand-by knows that the keeper lives: a pipe of which only the keeper has the writing end.

One byte says everything: ``+`` alive, the output should be on; ``-`` alive, it should not; ``.`` leaving in order, with
the output confirmed as off; ``!`` leaving without that.  The end of the pipe without either is a death, however it
came; silence after ``+`` is a keeper that is frozen.  Where a process can't inherit a pipe (Windows) there is no
lifeline, and the client alone wakes the stand-by.
"""

from __future__ import annotations

import os
from contextlib import suppress

BEAT_S = 0.25
SILENCE_S = 2.0
"""So long may a keeper whose output should be on be silent, s.  The client's own limit is shorter; this one counts when
keeper and client are frozen together."""


class Lifeline:
    """The keeper's end.

    Parameters
    ----------
    descriptor : int or None
        The writing end; None where there is none.
    """

    def __init__(self, descriptor: int | None) -> None:
        self._descriptor = descriptor
        self._next_s = 0.0
        self._said_on = False
        if descriptor is not None:
            os.set_blocking(descriptor, False)

    def beat(self, now_s: float, *, output_on: bool) -> None:
        """Say that the keeper lives, a few times a second and whenever the output changes; never blocks."""
        if now_s < self._next_s and output_on == self._said_on:
            return
        self._next_s = now_s + BEAT_S
        self._said_on = output_on
        self._say(b"+" if output_on else b"-")

    def leave(self, *, in_order: bool) -> None:
        """Say that the keeper leaves; not in order, the stand-by makes sure of the output once more."""
        self._say(b"." if in_order else b"!")
        if self._descriptor is not None:
            os.close(self._descriptor)
            self._descriptor = None

    def _say(self, byte: bytes) -> None:
        if self._descriptor is not None:
            with suppress(OSError):
                os.write(self._descriptor, byte)


class Listener:
    """The stand-by's end, as plain logic: bytes and times go in, what has become of the keeper comes out.

    Attributes
    ----------
    ended : "" or "in order" or "unsure" or "died"
        What has become of the keeper.
    """

    def __init__(self, now_s: float) -> None:
        self.ended = ""
        self._on = False
        self._heard_s = now_s
        self._looked_s = now_s

    def hear(self, data: bytes, now_s: float) -> None:
        """Take what came through the pipe; b"" is its end."""
        self._heard_s = now_s
        if self.ended:
            return
        if not data:
            self.ended = "died"
        elif b"." in data:
            self.ended = "in order"
        elif b"!" in data:
            self.ended = "unsure"
        else:
            self._on = data.endswith(b"+")

    def frozen(self, now_s: float) -> bool:
        """Whether the keeper is silent although its output should be on; a stand-by that stood still itself waits."""
        stood_s, self._looked_s = now_s - self._looked_s, now_s
        if stood_s > SILENCE_S / 4:
            self._heard_s = now_s
        return self._on and not self.ended and now_s - self._heard_s > SILENCE_S
