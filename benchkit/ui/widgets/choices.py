"""The choices of a question, by key.

A figure that is typed on where an entry stood a moment before must not end in a choice: its unit's letter would be one.
So what follows a figure belongs to the figure, up to Enter or Esc, and is said not to have been taken.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, Self

from rich.text import Text
from textual import events
from textual.message import Message
from textual.widget import Widget

from benchkit.procedure.actions import Choice
from benchkit.ui.look import CARE, INK, QUIET, STRONG, safe
from benchkit.ui.widgets.answer_keys import keyed, keys_in_words
from benchkit.ui.widgets.words import Words


def keeps_keys(widget: Widget) -> bool:
    """Whether a widget that is told to give the keys away is shown, and so keeps them.

    Between two questions all answers are hidden for a moment.  The toolkit hears of it only with the next layout, when
    the next question may have got the keys already, and would take them away again: they would go nowhere.
    """
    return all(node.display for node in widget.ancestors_with_self)


class Choices(Words, can_focus=True):
    """The choices of a question: Enter takes the marked one, a letter takes its own, arrows move the mark."""

    class Taken(Message):
        """Posted when a choice was taken."""

        def __init__(self, choice: Choice) -> None:
            super().__init__()
            self.choice = choice

    class Refused(Message):
        """Posted when a key was pressed that takes none of the choices."""

        def __init__(self, words: str) -> None:
            super().__init__()
            self.words = words

    def __init__(self, **more: Any) -> None:
        super().__init__(**more)
        self._choices: tuple[tuple[str, Choice], ...] = ()
        self._marked = 0
        self._stacked = False
        self._arrows = True
        self._usual = True
        self._space = False
        self._drawn_for = 0
        self._figure = ""
        self.typed_ahead: Callable[[events.Key], bool] = lambda _key: False
        """Takes a key that begins an entry, or belongs to one that is yet to come."""

    def blur(self) -> Self:
        """Give the keys away, unless this is shown."""
        return self if keeps_keys(self) else super().blur()

    def offer(
        self,
        choices: tuple[Choice, ...],
        *,
        stacked: bool = False,
        marked: int = 0,
        arrows: bool = True,
        usual: bool = True,
        space: bool = False,
    ) -> None:
        """Offer `choices`, one a row when `stacked`; without `arrows` these keys are left to others.

        Without a `usual` one Enter takes none of them: a confirmation wants its own key.  With `space` the space bar
        takes the first.
        """
        self._usual, self._space = usual, space
        self._figure = ""
        self._choices = keyed(choices)
        self._marked = min(marked, max(0, len(choices) - 1))
        self._stacked = stacked
        self._arrows = arrows
        self._draw()

    @property
    def keys(self) -> str:
        """The keys that answer, in words."""
        keys = keys_in_words([choice for _, choice in self._choices])
        return f"{keys}, or Enter" if self._usual else keys

    def on_key(self, event: events.Key) -> None:
        """Take or move."""
        if not self._figure and self.typed_ahead(event):
            event.stop()
            event.prevent_default()
            return
        if not self._choices:
            return
        if self._belongs_to_figure(event):
            event.stop()
            event.prevent_default()
            return
        if event.key == "enter" and not self._usual:
            self.post_message(self.Refused(f"Enter answers nothing here: {self.keys}."))
        elif event.key == "enter":
            self.post_message(self.Taken(self._choices[self._marked][1]))
        elif self._arrows and event.key in (("left", "right", "up", "down") if self._stacked else ("left", "right")):
            step = 1 if event.key in ("right", "down") else -1
            self._marked = (self._marked + step) % len(self._choices)
            self._draw()
        else:
            found = [
                choice for letter, choice in self._choices if event.character and event.character.lower() == letter
            ]
            if not found:
                if event.is_printable and event.character and event.character.strip():
                    self.post_message(self.Refused(f"{safe(event.character)} answers nothing here: {self.keys}."))
                return
            self.post_message(self.Taken(found[0]))
        event.stop()
        event.prevent_default()

    def _belongs_to_figure(self, event: events.Key) -> bool:
        """Take the keys of a figure that nobody asked for, up to Enter or Esc, and say that it is not taken."""
        figure, self._figure = self._figure, ""
        if figure and event.key in ("enter", "escape"):
            self.post_message(self.Refused(f'"{safe(figure)}" is not taken: {self.keys}.'))
            return True
        character = event.character if event.is_printable else None
        starts = character is not None and character.isdigit() and character not in dict(self._choices)
        if not (figure or starts):
            return False
        if character is None:
            self._figure = figure[:-1] if event.key == "backspace" else figure
            return event.key == "backspace"
        self._figure = figure + character
        self.post_message(
            self.Refused(f'"{safe(self._figure)}" answers nothing here. Enter clears it; then {self.keys}.')
        )
        return True

    def watch_has_focus(self, _has_focus: bool) -> None:
        """Show the mark, or that Enter goes elsewhere."""
        super().watch_has_focus(_has_focus)
        self._draw()

    def _draw(self) -> None:
        text = Text()
        width, filled = self.size.width, 0
        for number, (letter, choice) in enumerate(self._choices):
            marked = self._usual and number == self._marked and self.has_focus
            key = "Enter" if marked else letter.upper()
            if self._space and number == 0:
                key += " or space"
            one = Text()
            one.append(f" {key} ", style=f"bold reverse {CARE}" if marked else f"bold {CARE}")
            one.append(f" {safe(choice.label)}", style=f"bold {STRONG}" if marked else INK)
            if marked and not self._stacked and letter != "enter":
                one.append(f" ({letter.upper()})", style=QUIET)
            if number:
                fits = not width or filled + 3 + one.cell_len <= width
                text.append("   " if fits and not self._stacked else "\n")
                filled = filled + 3 if fits else 0
            filled += one.cell_len
            text.append_text(one)
        self._drawn_for = width
        self.say(text)

    def on_resize(self) -> None:
        """Break the line between two choices, never inside one."""
        if self.size.width != self._drawn_for:
            self._draw()
