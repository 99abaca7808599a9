"""What the session sees of the screens."""

from __future__ import annotations

from typing import TYPE_CHECKING

from benchkit.procedure.actions import Question
from benchkit.session.front import Reply, View

if TYPE_CHECKING:
    from benchkit.ui.app import BenchApp


class ScreenFront:
    """What the session sees of the screens (`benchkit.session.front.Front`)."""

    def __init__(self, app: BenchApp) -> None:
        self._app = app

    def show(self, view: View) -> None:
        """Display a picture of the walk, at the next repaint."""
        self._app.take_view(view)

    async def ask(self, question: Question, refused: str = "") -> Reply:
        """Put a question and wait for the reply; when cancelled, the question goes away."""
        return await self._app.put_question(question, refused)
