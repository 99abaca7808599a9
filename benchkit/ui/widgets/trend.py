"""The last seconds of a watched reading."""

from __future__ import annotations

from typing import Any, ClassVar

from rich.segment import Segment
from textual.strip import Strip
from textual.widget import Widget

from benchkit.session.front import LiveView
from benchkit.ui.look import INK
from benchkit.ui.widgets.trend_cells import trend_rows


class Trend(Widget):
    """One mark a slice of time between the two lines of the limits; the newest at the right."""

    COMPONENT_CLASSES: ClassVar[set[str]] = {"trend--marks"}
    DEFAULT_CSS = f"""
    Trend {{ height: 5; }}
    Trend > .trend--marks {{ color: {INK}; }}
    """

    def __init__(self, **more: Any) -> None:
        super().__init__(**more)
        self._live: LiveView | None = None
        self._rows: tuple[str, ...] = ()
        self._drawn_for: tuple[object, int, int] | None = None

    def say(self, live: LiveView | None) -> None:
        """Show the trend of `live`."""
        if live != self._live:
            self._live = live
            self.refresh()

    def render_line(self, y: int) -> Strip:
        """Draw one row."""
        width, height = self.size.width, self.size.height
        live = self._live
        if live is None:
            return Strip.blank(width, self.rich_style)
        wanted = (live, width, height)
        if self._drawn_for != wanted:
            self._rows = trend_rows(width, height, live.trend, live.low, live.high, target=live.target)
            self._drawn_for = wanted
        style = self.get_component_rich_style("trend--marks")
        return Strip([Segment(self._rows[y] if y < len(self._rows) else " " * width, style)], width)
