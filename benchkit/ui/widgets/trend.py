"""The last minutes of a watched reading, and what is expected of the next."""

from __future__ import annotations

from itertools import groupby
from typing import Any, ClassVar

from rich.segment import Segment
from textual.geometry import Region
from textual.strip import Strip
from textual.widget import Widget

from benchkit.session.front import LiveView
from benchkit.ui.look import CARE, INK, LINE, PASS, QUIET, STRONG
from benchkit.ui.widgets.trend_cells import Row, Trace, trend_picture
from benchkit.ui.widgets.trim_words import bare_figure


class Trend(Widget):
    """Draws a picture of `trend_cells`; only rows that changed are painted again."""

    COMPONENT_CLASSES: ClassVar[set[str]] = {
        "trend--none",
        "trend--read",
        "trend--limit",
        "trend--target",
        "trend--now",
        "trend--expected",
        "trend--rest",
        "trend--words",
    }
    DEFAULT_CSS = f"""
    Trend {{ height: 5; }}
    Trend > .trend--read {{ color: {STRONG}; }}
    Trend > .trend--limit {{ color: {PASS}; }}
    Trend > .trend--target {{ color: {QUIET}; }}
    Trend > .trend--now {{ color: {LINE}; }}
    Trend > .trend--expected {{ color: {CARE}; text-style: bold; }}
    Trend > .trend--rest {{ color: {CARE}; text-style: bold; }}
    Trend > .trend--words {{ color: {INK}; }}
    """

    def __init__(self, **more: Any) -> None:
        super().__init__(**more)
        self._live: LiveView | None = None
        self._rows: tuple[Row, ...] = ()

    def say(self, live: LiveView | None) -> None:
        """Show the trend of `live`."""
        if live is not self._live:
            self._live = live
            self._draw()

    def on_resize(self) -> None:
        """Draw for another room."""
        self._draw()

    def render_line(self, y: int) -> Strip:
        """Draw one row."""
        width = self.size.width
        if y >= len(self._rows):
            return Strip.blank(width, self.rich_style)
        segments = [
            Segment("".join(cell.character for cell in cells), self.get_component_rich_style(f"trend--{kind}"))
            for kind, cells in groupby(self._rows[y], key=lambda cell: cell.kind)
        ]
        return Strip(segments, width)

    def _draw(self) -> None:
        live, before = self._live, self._rows
        width, height = self.size.width, self.size.height
        self._rows = () if live is None else trend_picture(width, height, trace_of(live))
        if len(before) != len(self._rows):
            self.refresh()
            return
        changed = [
            Region(0, y, width, 1) for y, rows in enumerate(zip(before, self._rows, strict=True)) if rows[0] != rows[1]
        ]
        if changed:
            self.refresh(*changed)


def trace_of(live: LiveView) -> Trace:
    """Return what is drawn of a watched reading."""
    return Trace(
        read=live.trend,
        low=live.low,
        high=live.high,
        target=live.target,
        expected=live.predicted,
        rest_low=live.settles_low,
        rest_high=live.settles_high,
        low_text=bare_figure(live.low, live.target, live.unit),
        high_text=bare_figure(live.high, live.target, live.unit),
        target_text=bare_figure(live.target, live.target, live.unit),
    )
