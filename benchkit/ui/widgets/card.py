"""What to do now, where the probes go, what to expect, what to beware of, and why."""

from __future__ import annotations

from typing import Any

from rich.table import Table
from rich.text import Text
from textual.containers import VerticalScroll

from benchkit.procedure.actions import Question
from benchkit.session.front import AimView, SuspectsView
from benchkit.ui.look import BLOCK, CARE, INK, LIGHT_SHADE, QUIET, RED_LEAD, STRONG, UP, safe
from benchkit.ui.widgets.gauge_scale import DESIGN, THIS_UNIT
from benchkit.ui.widgets.suspects_text import suspects_drawn
from benchkit.ui.widgets.words import Words


def progress_words(share: float | None, remaining_s: float | None, width: int = 30) -> str:
    """Return a bar with its share in words, and what remains.

    Examples
    --------
    >>> progress_words(0.5, 90.0, width=4)
    '██░░ 50 %, 1 min 30 s left'
    """
    parts = []
    if share is not None:
        share = min(1.0, max(0.0, share))
        full = int(share * width + 0.5)
        parts.append(f"{BLOCK * full}{LIGHT_SHADE * (width - full)} {share * 100:.0f} %")
    if remaining_s is not None:
        parts.append(f"{time_words(remaining_s)} left")
    return ", ".join(parts)


def time_words(seconds: float) -> str:
    """Return a length of time in minutes and seconds.

    Examples
    --------
    >>> time_words(75.2)
    '1 min 16 s'
    """
    whole = max(0, int(-(-seconds // 1)))
    return f"{whole // 60} min {whole % 60} s" if whole >= 60 else f"{whole} s"


class Card(VerticalScroll):
    """The sheet that lies before the person; arrow keys and page keys move it when it is longer than its room."""

    def __init__(self, **more: Any) -> None:
        super().__init__(**more)
        self._do = Words(classes="card-do")
        self._suspects = Words(classes="card-suspects empty")
        self._details = Words(classes="card-details")
        self._question: Question | None = None
        self._aim: AimView | None = None
        self.can_focus = False

    def compose(self) -> Any:
        """Lay out the sentence and the details."""
        yield self._do
        yield self._suspects
        yield self._details

    @property
    def rows_wanted(self) -> int:
        """Rows that all of it takes."""
        shown = (child for child in self.children if child.display)
        return max((child.virtual_region_with_margin.bottom for child in shown), default=0)

    def put(self, question: Question) -> None:
        """Show a question."""
        self._question, self._aim = question, None
        do = Text(safe(question.do or question.title), style=f"bold {STRONG}")
        self._do.say(do)
        self._do.remove_class("waiting")
        self._draw_details(question)
        self.suspect(None)
        self.scroll_home(animate=False)

    def aim(self, aim: AimView | None) -> None:
        """Show this unit's own limits beside the design's, as soon as they are known."""
        question = self._question
        if question is None or aim == self._aim or (aim is not None and aim.point != question.point):
            return
        self._aim = aim
        self._draw_details(question)

    def suspect(self, suspects: SuspectsView | None) -> None:
        """Show what would explain the readings."""
        self._suspects.set_class(suspects is None, "empty")
        if suspects is not None:
            self._suspects.say_drawn(suspects, suspects_drawn(suspects))

    def _draw_details(self, question: Question) -> None:
        rows: list[tuple[str, str, Text]] = []
        if question.red:
            rows.append(("red probe", f"bold {RED_LEAD}", Text(safe(question.red), style=f"bold {INK}")))
        if question.black:
            rows.append(("black probe", f"bold {INK}", Text(safe(question.black), style=f"bold {INK}")))
        unit = self._aim.unit_text if self._aim is not None else ""
        if question.expected:
            rows.append((DESIGN if unit else "expect", QUIET, Text(safe(question.expected), style=INK)))
        if unit:
            rows.append((THIS_UNIT, f"bold {INK}", Text(safe(unit), style=f"bold {INK}")))
        if question.caution:
            rows.append((f"{UP} care", f"bold {CARE}", Text(safe(question.caution), style=CARE)))
        if question.why:
            rows.append(("because", QUIET, Text(safe(question.why), style=QUIET)))
        table = Table.grid(padding=(0, 2, 0, 0))
        table.add_column(justify="right", no_wrap=True, min_width=6)
        table.add_column(ratio=1)
        for label, style, words in rows:
            table.add_row(Text(label, style=style), words)
        self._details.say_drawn((question, unit, "details"), table)
        self._details.set_class(not rows, "empty")

    def wait(self, busy: str, share: float | None, remaining_s: float | None) -> None:
        """Show that the person has to wait, and for what."""
        self._question = None
        self.suspect(None)
        text = Text(safe(busy or "One moment."), style=f"bold {STRONG}")
        bar = progress_words(share, remaining_s)
        if bar:
            text.append(f"\n{bar}", style=INK)
        self._do.say(text)
        self._do.add_class("waiting")
        self._details.add_class("empty")
