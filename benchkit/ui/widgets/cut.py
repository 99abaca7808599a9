"""One line of text that says by two dots that it had to be cut."""

from __future__ import annotations

from typing import Final

from rich.console import Console, ConsoleOptions, RenderResult
from rich.measure import Measurement
from rich.text import Text

DOTS: Final = ".."
"""The plain console fonts have no ellipsis."""


def cut(text: Text, width: int) -> Text:
    """Return `text` in no more than `width` cells.

    Examples
    --------
    >>> cut(Text("Rails by resistors"), 12).plain, cut(Text("Rails"), 12).plain
    ('Rails by r..', 'Rails')
    """
    if text.cell_len <= width:
        return text
    shorter = text.copy()
    shorter.truncate(max(0, width - len(DOTS)), overflow="crop")
    shorter.rstrip()
    return shorter.append(DOTS[: max(0, width)])


class Cut:
    """Draws a text in one line of whatever room it gets.

    Parameters
    ----------
    text : rich.text.Text
    """

    def __init__(self, text: Text) -> None:
        self.text = text.copy()
        self.text.no_wrap, self.text.overflow = True, "crop"

    def __rich_console__(self, _console: Console, options: ConsoleOptions) -> RenderResult:
        """Draw it."""
        yield cut(self.text, options.max_width)

    def __rich_measure__(self, _console: Console, options: ConsoleOptions) -> Measurement:
        """Return the room that it wants."""
        return Measurement(min(4, options.max_width), min(self.text.cell_len, options.max_width))
