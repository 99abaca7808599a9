"""The usual moment: do this, then say so; below it the last reading against its limits."""

from __future__ import annotations

from typing import Any

from benchkit.procedure.actions import Question
from benchkit.session.front import ResultView, View
from benchkit.ui.pages.base import Page
from benchkit.ui.widgets.outcome import Outcome
from benchkit.ui.widgets.probe_strip import ProbeStrip
from benchkit.ui.widgets.words import Words


class StepPage(Page):
    """Sheet, what the probes read now and go to next, last result, answer.

    A sheet that is longer than its room takes that of the last result's drawing first; so does a reading of the moment.
    """

    def __init__(self, guard_s: float, **more: Any) -> None:
        super().__init__(guard_s, **more)
        self._strip = ProbeStrip(classes="probe-strip")
        self._outcome = Outcome(classes="outcome")
        self._at_stop: tuple[ResultView, ...] | None = None

    def compose(self) -> Any:
        """Lay out from what to do, over what came of the last, to the answer."""
        yield self.card
        yield self._strip
        yield self._outcome
        yield self.answer

    def say(self, view: View) -> None:
        """Show the walk."""
        super().say(view)
        if not view.stopped:
            self._at_stop = view.results
        elif self._at_stop is None:
            self._at_stop = view.results  # gone on with after a stop: what is here is from before it
        probing = self.question is not None and self.question.kind == "probes"
        self._strip.say(view.live if probing else None, view.next_probe if probing else "")
        self.set_class(probing and view.live is not None, "probing")
        old = bool(view.stopped) and view.results == self._at_stop
        self._outcome.say(view.results, heading="before the stop" if old else "before this")

    def age(self) -> None:
        """Let a reading of the moment grow old in sight."""
        self._strip.age()

    def mark_overflow(self) -> None:
        """Give the sheet the room that it needs, then say what still doesn't fit."""
        wanted, room = self.card.rows_wanted, self.card.size.height
        if self.has_class("tight"):
            self.set_class(wanted + self._outcome.drawing_rows > room, "tight")
        else:
            self.set_class(self.card.max_scroll_y > 0, "tight")
        super().mark_overflow()


class HoldPage(Page):
    """A point that nobody passes without typing yes; framed, so that it looks like nothing else."""

    def __init__(self, guard_s: float, **more: Any) -> None:
        super().__init__(guard_s, **more)
        self._frame = Words(classes="hold-title")

    def compose(self) -> Any:
        """Lay out the frame's title, the sheet and the entry."""
        yield self._frame
        yield self.card
        yield self.answer

    def put(self, question: Question, refused: str) -> None:
        """Put the question under its title."""
        super().put(question, refused)
        self._frame.say(f"HOLD POINT: {question.title}")


class DecidePage(Page):
    """A reading that did not pass: what it was, how far off, and what can be done; choices one a row."""

    def __init__(self, guard_s: float, **more: Any) -> None:
        super().__init__(guard_s, **more)
        self._outcome = Outcome(classes="outcome deciding")

    def compose(self) -> Any:
        """Lay out the result first: it is what the decision is about."""
        yield self._outcome
        yield self.card
        yield self.answer

    def put(self, question: Question, refused: str) -> None:
        """Put the question with its choices one under the other."""
        super().put(question, refused)
        self.answer.put(question, refused, stacked=True)

    def say(self, view: View) -> None:
        """Show the walk."""
        super().say(view)
        suspects = view.suspects
        about = suspects is not None and self.question is not None
        self.set_class(about, "explained")
        self.card.suspect(suspects if about else None)
        self._outcome.say(_of_item_last(view.results, view.item), heading="this reading")


def _of_item_last(results: tuple[ResultView, ...], item: str) -> tuple[ResultView, ...]:
    """Put the result that the decision is about last, behind the extra readings that were taken to explain it."""
    own = tuple(result for result in results if result.item == item)
    return (*(result for result in results if result.item != item), *own)
