"""Text that repaints only when it has changed."""

from __future__ import annotations

from typing import Any

from rich.console import RenderableType
from rich.text import Text
from textual.widgets import Static

from benchkit.ui import look


class Words(Static):
    """A static text that remembers what it shows; setting the same words again costs nothing."""

    def __init__(self, words: str = "", **more: Any) -> None:
        super().__init__("", markup=False, **more)
        self._shown: object = None
        if words:
            self.say(words)

    def say(self, words: str | Text) -> bool:
        """Show `words`; returns whether anything changed."""
        key: object = words if isinstance(words, str) else (words.plain, tuple(words.spans), words.style)
        if key == self._shown:
            return False
        self._shown = key
        self._change(look.safe(words) if isinstance(words, str) else words)
        return True

    def say_drawn(self, key: object, drawn: RenderableType) -> bool:
        """Show something already laid out; `key` decides whether it is new."""
        if key == self._shown:
            return False
        self._shown = key
        self._change(drawn)
        return True

    def _change(self, drawn: RenderableType) -> None:
        """Show something new; the screen is laid out anew only when it takes another number of rows."""
        width = self.content_size.width
        if not self.is_mounted or not self.display or not width:
            self.update(drawn)
            return
        before = self.get_content_height(self.container_size, self.app.size, width)
        self.update(drawn, layout=False)
        if self.get_content_height(self.container_size, self.app.size, width) != before:
            self.refresh(layout=True)

    def with_words(self, drawn: RenderableType) -> Words:
        """Return itself showing `drawn`, for use while composing."""
        self.say_drawn(id(drawn), drawn)
        return self
