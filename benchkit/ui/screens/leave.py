"""The question before leaving while the supply is on, or may be."""

from __future__ import annotations

from typing import Any, ClassVar

from textual.binding import Binding, BindingType
from textual.containers import Vertical
from textual.screen import ModalScreen

from benchkit.procedure.actions import Choice
from benchkit.session.front import SupplyView
from benchkit.session.supply_view import PULL_THE_PLUG
from benchkit.ui.screens.base import BenchScreen
from benchkit.ui.widgets.choices import Choices
from benchkit.ui.widgets.words import Words

STAY = Choice(value="no", label="stay here")
LEAVE = Choice(value="yes", label="switch off and leave")
LEAVE_BY_HAND = Choice(value="yes", label="leave; it is off, or I switch it off")


def leaving_question(supply: SupplyView) -> str:
    """Return what is known of the supply, and what leaving does about it, for the question before leaving.

    Examples
    --------
    >>> leaving_question(SupplyView(energised="on", words="", by_hand=False, state=None))
    'The supply is on. Leaving switches it off first and ends the walk: only its way out is left to be gone on with.'
    """
    ends = "ends the walk: only its way out is left to be gone on with."
    if supply.hint == PULL_THE_PLUG:
        what = f"{supply.label.removesuffix(' (you said)').capitalize()} through the series lamp."
        return f"{what} Nothing here switches it off: PULL THE PLUG before you leave. Leaving {ends}"
    if supply.by_hand:
        known = "You said that the supply is on." if supply.energised == "on" else "The supply may be on."
        return f"{known} Nothing here switches it off: switch it off BY HAND before you leave. Leaving {ends}"
    known = "The supply is on." if supply.energised == "on" else "Nobody knows whether the supply is on."
    return f"{known} Leaving switches it off first and {ends}"


class LeaveScreen(BenchScreen, ModalScreen[Any]):
    """Leaving means off first; staying is the usual answer."""

    BINDINGS: ClassVar[list[BindingType]] = [Binding("escape", "stay", show=False)]

    def __init__(self, supply: SupplyView, **more: Any) -> None:
        super().__init__(**more)
        self._words = leaving_question(supply)
        self._leave = LEAVE_BY_HAND if supply.by_hand else LEAVE
        self._choices = Choices(classes="leave-choices")

    def compose_body(self) -> Any:
        """Lay out the question."""
        with Vertical(classes="leave-box"):
            yield Words(self._words, classes="leave-words")
            yield self._choices

    def on_mount(self) -> None:
        """Mark the safe answer."""
        self._choices.offer((STAY, self._leave), marked=0)
        self._choices.focus()

    def on_choices_taken(self, message: Choices.Taken) -> None:
        """Answer."""
        message.stop()
        self.dismiss(message.choice is self._leave)

    def action_stay(self) -> None:
        """Stay."""
        self.dismiss(False)
