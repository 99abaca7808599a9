"""The reading in figures that can be read from across the bench."""

from __future__ import annotations

from typing import Any, ClassVar

from rich.segment import Segment
from textual.geometry import Size
from textual.strip import Strip
from textual.widget import Widget

from benchkit.ui.widgets.digit_shapes import ROWS, big_rows, fit, split_reading


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

    def say(self, text: str, note: str = "", stale: bool = False) -> None:
        """Show `text` (figures and unit); `note` stands under the unit; `stale` dims it."""
        if (text, note, stale) == (self._text, self._note, self._stale):
            return
        self._text, self._note, self._stale = text, note, stale
        self.refresh()

    def get_content_height(self, container: Size, viewport: Size, width: int) -> int:
        """Take two rows a cell where there is plenty of room, else one."""
        return ROWS * 2 if viewport.height >= 34 and width >= 100 else ROWS

    def render_line(self, y: int) -> Strip:
        """Draw one row."""
        width = self.size.width
        figures, unit = split_reading(self._text)
        beside = max(len(unit), len(self._note), 1) + 2
        scale = fit(figures, max(1, width - beside), self.size.height)
        kind = "big-reading--stale" if self._stale else "big-reading--figures"
        ink = self.get_component_rich_style(kind)
        unit_style = self.get_component_rich_style("big-reading--unit")
        if scale is None:
            text = self._text if y == 0 else (self._note if y == 1 else "")
            return Strip([Segment(text[:width].ljust(width), unit_style)], width)
        rows = big_rows(figures, *scale, ink="▒" if self._stale else "█")
        drawn = rows[y] if y < len(rows) else " " * len(rows[0])
        aside = {len(rows) - 1: unit, len(rows) - 3: self._note}.get(y, "")
        aside = ("  " + aside)[: width - len(drawn)]
        rest = " " * (width - len(drawn) - len(aside))
        return Strip([Segment(drawn, ink), Segment(aside + rest, unit_style)], width)
