"""What all screens share: the off line at the bottom, and a page that says when a terminal is too small."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any, Final, cast

from textual import events
from textual.binding import Binding, BindingType
from textual.screen import Screen
from textual.widgets import Input

from benchkit.ui.layout import LAYOUTS, Layout, layout_for
from benchkit.ui.widgets.off_line import OffLine
from benchkit.ui.widgets.words import Words

if TYPE_CHECKING:
    from benchkit.ui.app import BenchApp


TURN_OVER: Final[list[BindingType]] = [
    Binding("pageup", "turn_over(-6)", show=False),
    Binding("pagedown", "turn_over(6)", show=False),
    Binding("up", "turn_over(-1)", show=False),
    Binding("down", "turn_over(1)", show=False),
]
"""Keys that move a sheet which is longer than its room."""


class BenchScreen(Screen[Any]):
    """A screen with its off line."""

    AUTO_FOCUS = ""

    def __init__(self, **more: Any) -> None:
        super().__init__(**more)
        self.off_line = OffLine(classes="off-line")
        self.too_small = Words(classes="too-small")
        self.arrangement: Layout = "full"

    @property
    def bench(self) -> BenchApp:
        """The app, as what it is."""
        return cast("BenchApp", self.app)

    def compose(self) -> Any:
        """Lay out the body between the page for small terminals and the off line."""
        yield self.too_small
        yield from self.compose_body()
        yield self.off_line

    def compose_body(self) -> Any:
        """Lay out what the screen is for."""
        yield from ()

    def on_mount(self) -> None:
        """Take the state that is known."""
        self.lay_out(self.app.size.width, self.app.size.height)
        self.refresh_off_line()

    def on_resize(self, event: events.Resize) -> None:
        """Choose the layout."""
        self.lay_out(event.size.width, event.size.height)

    def lay_out(self, width: int, height: int) -> None:
        """Choose the layout for a size."""
        self.arrangement = layout_for(width, height)
        for name in LAYOUTS:
            self.set_class(name == self.arrangement, name)
        self.too_small.say(f"{width}x{height} is too small to work with: 40x12 at least, better 80x24.")

    def on_descendant_focus(self) -> None:
        """An entry may have taken keys."""
        self.refresh_off_line()

    def on_descendant_blur(self) -> None:
        """Keys may be free again."""
        self.refresh_off_line()

    def refresh_off_line(self) -> None:
        """Show what is known of the supply."""
        self.off_line.say(self.bench.supply_shown, typing=isinstance(self.focused, Input), asked=self.bench.off_asked)
