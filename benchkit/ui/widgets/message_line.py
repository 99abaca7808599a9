"""A message that may be longer than its room: its rows come one after the other, numbered, without a key."""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Any, Final

from rich.cells import cell_len
from rich.console import Console
from rich.text import Text

from benchkit.ui.look import safe
from benchkit.ui.widgets.words import Words

ROW_S: Final = 5.0
"""So long a row stands (s): some thirteen words."""

_MEASURE: Final = Console(width=80, color_system=None, force_terminal=False)


def rows_of(message: str, width: int, most: int) -> tuple[str, ...]:
    """Return what is shown one after the other of a message, in a room of so many rows.

    Examples
    --------
    >>> rows_of("The supply did not answer.", 30, 1)
    ('The supply did not answer.',)
    >>> rows_of("The supply did not answer, so it was asked again.", 30, 1)
    ('1/3 The supply did not', '2/3 answer, so it was asked', '3/3 again.')
    """
    width = max(10, width)
    text = safe(message)
    whole = [line.plain.rstrip() for line in Text(text).wrap(_MEASURE, width)]
    if len(whole) <= most or cell_len(text) <= width:
        return (text,)
    lines = [line.plain.rstrip() for line in Text(text).wrap(_MEASURE, width - len("10/10 "))]
    parts = [lines[first : first + most] for first in range(0, len(lines), most)]
    return tuple(f"{number}/{len(parts)} " + "\n    ".join(part) for number, part in enumerate(parts, start=1))


class MessageLine(Words):
    """Shows a message in its room, part after part.

    Parameters
    ----------
    clock : callable
        Tells the time (s).
    """

    def __init__(self, *, clock: Callable[[], float] = time.monotonic, **more: Any) -> None:
        super().__init__(**more)
        self._clock = clock
        self._message = ""
        self._since_s = 0.0

    def put(self, message: str, width: int, most: int) -> None:
        """Show a message, or the part of it that is due; called again and again."""
        now = self._clock()
        if message != self._message:
            self._message, self._since_s = message, now
        parts = rows_of(message, width, most)
        self.say(parts[int((now - self._since_s) / ROW_S) % len(parts)])
        self.set_class(not message, "empty")
