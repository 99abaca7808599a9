"""The line that is on every screen and in every dialog: is the supply on, and how to switch it off."""

from __future__ import annotations

from typing import Any

from rich.table import Table
from rich.text import Text
from textual.containers import Vertical

from benchkit.session.front import SupplyView
from benchkit.session.supply_view import PULL_THE_PLUG
from benchkit.ui.look import SUPPLY_SHAPES, SUPPLY_WORDS, safe
from benchkit.ui.widgets.words import Words


def how_to_switch_off(supply: SupplyView | None, typing: bool, narrow: bool = False, tiny: bool = False) -> str:
    """Return the words for the off key; Delete belongs to the entry while somebody types.

    Examples
    --------
    >>> how_to_switch_off(None, typing=True)
    'F9: OFF at once'
    """
    if supply is not None and supply.hint:
        return supply.hint
    if supply is not None and supply.by_hand:
        return "off BY HAND, F9" if narrow else "switch off BY HAND, then F9"
    if tiny:
        return "F9: OFF"
    if typing:
        return "F9: OFF at once"
    return "F9/Delete: OFF" if narrow else "F9 or Delete: OFF at once"


def asked_words(supply: SupplyView) -> str:
    """Return what came of the off key, as long as nothing has confirmed off; nothing is claimed that can't be.

    Examples
    --------
    >>> asked_words(SupplyView(energised="on", words="", by_hand=True, state=None))
    'F9 SWITCHES NOTHING HERE: switch it off by hand, now.'
    """
    if supply.never_on:
        return ""
    if supply.by_hand:
        way = "pull the mains plug" if supply.hint == PULL_THE_PLUG else "switch it off by hand"
        return f"F9 SWITCHES NOTHING HERE: {way}, now."
    if supply.state is None and supply.calm:
        return "F9 WAS PRESSED; the supply may not have heard it: use its own switch."
    return "OFF HAS BEEN ASKED FOR; waiting until the supply confirms it."


class OffLine(Vertical):
    """Two rows, never covered: the supply's state in words, and the key that switches it off."""

    def __init__(self, **more: Any) -> None:
        super().__init__(**more)
        self._supply: SupplyView | None = None
        self._typing = False
        self._asked = False
        self._first = Words(classes="off-first")
        self._second = Words(classes="off-second")

    def compose(self) -> Any:
        """Lay out the two rows."""
        yield self._first
        yield self._second

    def on_mount(self) -> None:
        """Show that nothing is known yet."""
        self._draw()

    def say(self, supply: SupplyView | None, *, typing: bool, asked: bool) -> None:
        """Show what is known; `typing`: an entry has the focus; `asked`: off was asked for and isn't confirmed yet."""
        if (supply, typing, asked) == (self._supply, self._typing, self._asked):
            return
        self._supply, self._typing, self._asked = supply, typing, asked
        self._draw()

    def on_resize(self) -> None:
        """A narrow terminal gets shorter words."""
        self._draw()

    def _draw(self) -> None:
        supply = self._supply
        energised = supply.energised if supply is not None else "unknown"
        label = supply.label if supply is not None else ""
        state = f"{SUPPLY_SHAPES[energised]} {label or SUPPLY_WORDS[energised]}"
        hint = how_to_switch_off(supply, self._typing, narrow=self.size.width < 50, tiny=self.size.width < 36)
        words = safe(supply.words) if supply is not None else ""
        if self._asked and supply is not None and energised != "off":
            words = f"{asked_words(supply)} {words}"
        row = Table.grid(expand=True)
        row.add_column(no_wrap=True, overflow="crop")
        row.add_column(justify="right", no_wrap=True, overflow="crop")
        row.add_row(Text(state, style="bold"), Text(hint, style="bold"))
        self._first.say_drawn((state, hint), row)
        self._second.say(words)
        shown = "calm" if supply is not None and supply.calm else energised
        for name in ("off", "on", "unknown", "calm"):
            self.set_class(name == shown, f"supply-{name}")
