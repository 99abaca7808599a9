"""The last result against its limits, its verdict in its place, and the few before it."""

from __future__ import annotations

from typing import Any, Final

from rich.console import Group
from rich.table import Table
from rich.text import Text
from textual.containers import Vertical

from benchkit.events import Verdict
from benchkit.session.front import ResultView
from benchkit.ui.look import INK, QUIET, STRONG, VERDICT_COLOURS, VERDICT_ORDER, VERDICT_SHAPES, VERDICT_WORDS, safe
from benchkit.ui.widgets.cut import Cut
from benchkit.ui.widgets.gauge import Gauge, Gauged
from benchkit.ui.widgets.words import Words

GAUGE_ROWS: Final = 3
"""Rows of a gauge: mark, scale, figures."""


def verdict_strip(verdict: Verdict | None) -> Text:
    """Return the three verdicts in their places, the one that holds with its shape, reversed."""
    text = Text()
    for place in VERDICT_ORDER:
        if text:
            text.append("│", style=QUIET)
        if place == verdict:
            style = f"bold reverse {VERDICT_COLOURS[place]}"
            text.append(f" {VERDICT_SHAPES[place]} {VERDICT_WORDS[place].upper()} ", style=style)
        else:
            text.append(f"   {VERDICT_WORDS[place]} ", style=QUIET)
    return text.append("│", style=QUIET)


def result_line(result: ResultView) -> Text:
    """Return one result in one line: shape, word, what, value, limits."""
    colour = VERDICT_COLOURS[result.verdict]
    text = Text(no_wrap=True, overflow="crop")
    text.append(f"{VERDICT_SHAPES[result.verdict]} {VERDICT_WORDS[result.verdict]:<10}", style=f"bold {colour}")
    point, rest = pointed(safe(result.title))
    text.append(point or rest, style=INK)
    text.append(f"  {safe(result.value_text)}", style=f"bold {STRONG}")
    limits = limits_words(result)
    if limits:
        text.append(f"  ({limits})", style=QUIET)
    if point:
        text.append(f"  {rest}", style=QUIET)
    for mark in marks_of(result):
        text.append(f"  {mark}", style=QUIET)
    return text


def pointed(title: str) -> tuple[str, str]:
    """Return the test point at the end of a title, and the rest of it; where a line is cut, the point stands first.

    Examples
    --------
    >>> pointed("Emitter resistors: ohm.emitter.upper.1")
    ('ohm.emitter.upper.1', 'Emitter resistors')
    >>> pointed("Look the board over")
    ('', 'Look the board over')
    """
    rest, found, point = title.rpartition(": ")
    return (point, rest) if found and " " not in point else ("", title)


def limits_words(result: ResultView) -> str:
    """Return the limits of a result in words, "" when it has none."""
    low, high = safe(result.low_text), safe(result.high_text)
    if result.low is not None and result.high is not None:
        return f"{low} to {high}"
    if result.high is not None:
        return f"at most {high}"
    return f"at least {low}" if result.low is not None else ""


def unit_words(result: ResultView) -> str:
    """Return this unit's own limits of a result in words, "" where it has none."""
    low, high = safe(result.unit_low_text), safe(result.unit_high_text)
    if result.unit_low is not None and result.unit_high is not None:
        words = f"{low} to {high}"
    elif result.unit_high is not None:
        words = f"at most {high}"
    elif result.unit_low is not None:
        words = f"at least {low}"
    else:
        return ""
    return f"{words}: ODD, it reads outside" if result.odd else words


def marks_of(result: ResultView) -> tuple[str, ...]:
    """Return what else must be said of a result."""
    marks = []
    if result.odd:
        marks.append("odd for this unit")
    if result.from_before:
        marks.append("from before the cut or the repair")
    if result.overridden:
        marks.append(f"went on although: {safe(result.overridden)}")
    return tuple(marks)


class Outcome(Vertical):
    """The newest result, drawn; `earlier` rows of those before it where there is room."""

    def __init__(self, **more: Any) -> None:
        super().__init__(**more)
        self._head = Words(classes="outcome-head")
        self._gauge = Gauge(classes="outcome-gauge")
        self._why = Words(classes="outcome-why")
        self._earlier = Words(classes="outcome-earlier")

    def compose(self) -> Any:
        """Lay out head, gauge, why, and what came before."""
        yield self._head
        yield self._gauge
        yield self._why
        yield self._earlier

    @property
    def drawing_rows(self) -> int:
        """Rows that drawing and words of the newest result take where they are shown (at most two of words)."""
        gauge = 0 if self._gauge.has_class("empty") else GAUGE_ROWS
        words = len(str(self._why.render())) if not self._why.has_class("empty") else 0
        return gauge + min(2, -(-words // max(1, self.size.width - 2)))

    def say(self, results: tuple[ResultView, ...], *, heading: str = "before this") -> None:
        """Show the newest of `results`, and the few before it."""
        self.display = bool(results)
        if not results:
            return
        result = results[-1]
        row = Table.grid(expand=True)
        row.add_column(ratio=1)
        row.add_column(justify="right", no_wrap=True, overflow="crop")
        words = Text()
        words.append(f" {heading}: ", style=QUIET)
        point, rest = pointed(safe(result.title))
        words.append(safe(result.value_text), style=f"bold {STRONG}")  # first: a narrow terminal cuts what comes last
        if point:
            words.append(f"  {point}", style=f"bold {INK}")
        words.append(f"  {rest}", style=INK)
        row.add_row(Cut(words), verdict_strip(result.verdict))
        self._head.say_drawn((result, heading), row)
        self._gauge.say(gauged(result))
        self._gauge.set_class(result.low is None and result.high is None, "empty")
        why = Text(safe(result.why), style=INK)
        for mark in marks_of(result)[1 if result.odd else 0 :]:
            why.append(f"  {mark}", style=QUIET)
        self._why.say(why)
        self._why.set_class(not why.plain, "empty")
        lines = [Cut(result_line(earlier)) for earlier in reversed(results[-9:-1])]
        self._earlier.say_drawn(tuple(results[-9:-1]), Group(*lines))


def gauged(result: ResultView) -> Gauged:
    """Return what the gauge shows of a result."""
    return Gauged(
        value=result.value,
        low=result.low,
        high=result.high,
        uncertainty=result.uncertainty,
        low_text=result.low_text,
        high_text=result.high_text,
        unit_low=result.unit_low,
        unit_high=result.unit_high,
        unit_text=unit_words(result),
        verdict=result.verdict,
    )
