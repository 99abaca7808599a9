"""The reading in figures that can be read from across the bench.

Figures keep their place: they are set from the right, in a size chosen for the widest figure that is to come, so that
neither a sign nor a tenth digit moves the point.  Only the columns that changed are painted again.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, ClassVar

from rich.segment import Segment
from textual.geometry import Region, Size
from textual.strip import Strip
from textual.widget import Widget

from benchkit.ui.widgets.digit_shapes import SIZES, FigureSize, big_rows, fit, split_reading, width_of


class BigReading(Widget):
    """Shows one reading as large as its room allows, its unit beside it in ordinary size."""

    COMPONENT_CLASSES: ClassVar[set[str]] = {"big-reading--figures", "big-reading--stale", "big-reading--unit"}
    DEFAULT_CSS = """
    BigReading { height: auto; min-height: 5; }
    BigReading > .big-reading--figures { color: #ffffff; }
    BigReading > .big-reading--stale { color: #a9b4bf; }
    BigReading > .big-reading--unit { color: #f2efe6; text-style: bold; }
    """

    def __init__(self, **more: Any) -> None:
        super().__init__(**more)
        self._text = ""
        self._note = ""
        self._stale = False
        self._widest = ""
        self._drawn: tuple[tuple[str, str], ...] = ()
        self._drawn_for: object = None

    def say(self, text: str, note: str = "", stale: bool = False, widest: str = "") -> None:
        """Show `text` (figures and unit).

        `note` stands under the unit, `stale` dims it, and `widest` is a reading as wide as any that is to come.
        """
        if (text, note, stale, widest) == (self._text, self._note, self._stale, self._widest):
            return
        self._text, self._note, self._stale, self._widest = text, note, stale, widest
        before, width = self._plain(), self.size.width
        self._draw()
        after = self._plain()
        if len(before) != len(after) or not width:
            self.refresh()
            return
        changed = changed_columns(before, after)
        if changed is not None:
            self.refresh(Region(changed[0], 0, changed[1] - changed[0] + 1, self.size.height))

    def get_content_height(self, container: Size, viewport: Size, width: int) -> int:
        """Take the rows that the figures take."""
        size = self._figure_size(width, min(container.height or SIZES[0].rows, SIZES[0].rows))
        return size.rows if size is not None else 1

    def render_line(self, y: int) -> Strip:
        """Draw one row."""
        self._draw()
        width = self.size.width
        if y >= len(self._drawn):
            return Strip.blank(width, self.rich_style)
        figures, aside = self._drawn[y]
        ink = self.get_component_rich_style("big-reading--stale" if self._stale else "big-reading--figures")
        unit_style = self.get_component_rich_style("big-reading--unit")
        return Strip([Segment(figures, ink), Segment(aside, unit_style)], width)

    def _plain(self) -> list[str]:
        return [figures + aside for figures, aside in self._drawn]

    def _figure_size(self, width: int, height: int) -> FigureSize | None:
        figures, unit = split_reading(self._text)
        widest = split_reading(self._widest)[0] or figures
        beside = max(len(unit), len(split_reading(self._widest)[1]), len(self._note), 1) + 2
        sizes = [fit(text, max(1, width - beside), height) for text in (figures, widest)]
        found = [size for size in sizes if size is not None]
        return min(found, key=lambda size: size.across) if len(found) == len(sizes) else sizes[0]

    def _draw(self) -> None:
        width, height = self.size.width, self.size.height
        key = (self._text, self._note, self._stale, self._widest, width, height)
        if key == self._drawn_for:
            return
        self._drawn_for = key
        figures, unit = split_reading(self._text)
        size = self._figure_size(width, height)
        if size is None:
            lines = (self._text, self._note)
            self._drawn = tuple(("", line[:width].ljust(width)) for line in lines[: max(1, height)])
            return
        rows = big_rows(figures, size, ink="▒" if self._stale else "█")
        room = max(len(rows[0]), width_of(split_reading(self._widest)[0], size.across) if self._widest else 0)
        drawn = []
        for y, row in enumerate(rows):
            aside = {len(rows) - 1: unit, len(rows) - 3: self._note}.get(y, "")
            aside = ("  " + aside)[: max(0, width - room)]
            rest = " " * max(0, width - room - len(aside))
            drawn.append((row.rjust(room), aside + rest))
        self._drawn = tuple(drawn)


def changed_columns(before: Sequence[str], after: Sequence[str]) -> tuple[int, int] | None:
    """Return the first and the last column in which two drawings of equal height differ, or None.

    Examples
    --------
    >>> changed_columns(["12.3", "____"], ["12.4", "____"])
    (3, 3)
    """
    columns = [
        column
        for one, other in zip(before, after, strict=True)
        for column in range(max(len(one), len(other)))
        if one[column : column + 1] != other[column : column + 1]
    ]
    return (min(columns), max(columns)) if columns else None
