"""The question before leaving while the supply is on, or may be."""

from __future__ import annotations

from typing import Any, ClassVar

from textual.binding import Binding, BindingType
from textual.containers import Vertical
from textual.screen import ModalScreen

from benchkit.procedure.actions import Choice
from benchkit.ui.screens.base import BenchScreen
from benchkit.ui.widgets.answer import Choices
from benchkit.ui.widgets.words import Words

STAY = Choice(value="no", label="stay here")
LEAVE = Choice(value="yes", label="switch off and leave")


class LeaveScreen(BenchScreen, ModalScreen[Any]):
    """Leaving means off first; staying is the usual answer."""

    BINDINGS: ClassVar[list[BindingType]] = [Binding("escape", "stay", show=False)]

    def __init__(self, words: str, **more: Any) -> None:
        super().__init__(**more)
        self._words = words
        self._choices = Choices(classes="leave-choices")

    def compose_body(self) -> Any:
        """Lay out the question."""
        with Vertical(classes="leave-box"):
            yield Words(self._words, classes="leave-words")
            yield self._choices

    def on_mount(self) -> None:
        """Mark the safe answer."""
        self._choices.offer((STAY, LEAVE), marked=0)
        self._choices.focus()

    def on_choices_taken(self, message: Choices.Taken) -> None:
        """Answer."""
        message.stop()
        self.dismiss(message.choice is LEAVE)

    def action_stay(self) -> None:
        """Stay."""
        self.dismiss(False)
