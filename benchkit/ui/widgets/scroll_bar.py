"""A scroll bar of whole cells: the usual one draws eighths of blocks, which plain console fonts lack."""

from __future__ import annotations

from typing import ClassVar

from textual.scrollbar import ScrollBar, ScrollBarRender


class WholeCellBar(ScrollBarRender):
    """Draws the thumb in whole cells, reversed, so that it shows without colour too."""

    VERTICAL_BARS: ClassVar[list[str]] = [" "]
    HORIZONTAL_BARS: ClassVar[list[str]] = [" "]


def use_whole_cells() -> None:
    """Make every scroll bar draw whole cells."""
    ScrollBar.renderer = WholeCellBar
