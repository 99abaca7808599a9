"""The ring beside the reading: how far to turn and which way, or how far a soak is."""

from __future__ import annotations

from typing import Any, ClassVar

from rich.segment import Segment
from textual.strip import Strip
from textual.widget import Widget

from benchkit.ui.look import CARE, FAIL, INK
from benchkit.ui.widgets.ring_cells import Sense, ring_rows, ring_width


class Ring(Widget):
    """A ring that is filled from the top, in a sense of rotation, with a word in the middle."""

    COMPONENT_CLASSES: ClassVar[set[str]] = {"ring--calm", "ring--turn", "ring--alarm"}
    DEFAULT_CSS = f"""
    Ring {{ width: 15; height: 1fr; }}
    Ring > .ring--calm {{ color: {INK}; text-style: bold; }}
    Ring > .ring--turn {{ color: {CARE}; text-style: bold; }}
    Ring > .ring--alarm {{ color: {FAIL}; text-style: bold; }}
    """

    def __init__(self, **more: Any) -> None:
        super().__init__(**more)
        self._shown: tuple[float, Sense, str, str] = (0.0, "clockwise", "", "calm")
        self._rows: tuple[str, ...] = ()
        self._drawn_for: object = None

    def say(self, share: float, sense: Sense, centre: str, kind: str = "calm") -> None:
        """Show a ring filled by `share`; `kind` is ``calm``, ``turn`` or ``alarm``."""
        shown = (share, sense, centre, kind)
        if shown == self._shown:
            return
        before, self._shown = self._shown, shown
        if self._draw() or before[3] != kind:
            self.refresh()

    def render_line(self, y: int) -> Strip:
        """Draw one row."""
        self._draw()
        width = self.size.width
        if y >= len(self._rows):
            return Strip.blank(width, self.rich_style)
        style = self.get_component_rich_style(f"ring--{self._shown[3]}")
        return Strip([Segment(self._rows[y].center(width)[:width], style)], width)

    def _draw(self) -> bool:
        """Draw anew where anything changed; returns whether the picture is another one."""
        key = (*self._shown[:3], self.size)
        if key == self._drawn_for:
            return False
        self._drawn_for, before = key, self._rows
        share, sense, centre, kind = self._shown
        height = self.size.height
        while height > 2 and ring_width(height) > self.size.width:
            height -= 1
        full = "▒" if kind == "alarm" else "█"
        self._rows = ring_rows(height, share, sense=sense, full=full, centre=centre)
        return before != self._rows
