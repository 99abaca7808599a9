"""The last minutes of a reading, and what is expected of the next, as rows of cells.

Rules
-----
* *Now* always stands in the same column, two thirds from the left: nothing jumps when an expectation comes or goes.
* Time is cut into slices that stay where they are: a slice that is over doesn't change any more, it only moves to the
  left.  A slice shows the mean of its readings.
* Readings that lie no further apart than is usual are joined; a longer gap stays empty, because a gap is news too.
* The limits are lines across with their figures before them, the target a broken line.  The scale is theirs; it reaches
  further, by whole steps, only as far as the limits still lie two rows apart.  What lies beyond is a triangle.
* What is expected is dotted, in thirds of a row; where it comes to rest its 95 % interval stands at the right end.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final, Literal

from benchkit.ui.widgets.gauge_scale import MARGIN

Kind = Literal["none", "read", "limit", "target", "now", "expected", "rest", "words"]

WINDOWS_S: Final = (30.0, 60.0, 120.0, 240.0, 480.0, 1200.0, 2400.0, 3600.0, 7200.0)
"""Lengths of the past that are shown (s); the smallest that holds the readings, or what is expected, is taken."""

NOW_AT: Final = 2.0 / 3.0
"""Where now stands, as a share of the width."""

LEAST_FILLED: Final = 0.5
"""What is expected may widen the window only as long as the readings fill this share of the past."""

REACHES: Final = (MARGIN, 1.0, 2.0, 4.0, 8.0)
"""What is shown beyond a limit, in distances between the limits."""

FEW_ROWS: Final = 4
"""So many rows hold both limits, the target between them, and one row more on the side to which the readings reach."""

THIRDS: Final = "°·."
"""Dots in the upper, middle and lower third of a cell."""

GAP: Final = 3.5
"""Readings further apart than so many usual distances are not joined ..."""

LEAST_GAP_S: Final = 2.5
"""... unless they are nearer than this (s): a turn of the screw is no gap."""


@dataclass(frozen=True, kw_only=True)
class Trace:
    """What a picture of a watched reading is made of: all values in one unit, times in one count of seconds.

    Parameters
    ----------
    read : sequence of (float, float)
        Readings, oldest first.
    low, high, target : float
    expected : sequence of (float, float)
        What is expected from now on.
    rest_low, rest_high : float or None
        The interval in which it comes to rest.
    low_text, high_text, target_text : str
        Figures that stand before the lines.
    """

    read: Sequence[tuple[float, float]]
    low: float
    high: float
    target: float | None = None
    expected: Sequence[tuple[float, float]] = ()
    rest_low: float | None = None
    rest_high: float | None = None
    low_text: str = ""
    high_text: str = ""
    target_text: str = ""


@dataclass(frozen=True)
class Cell:
    """One cell: what stands in it, and what kind of mark that is."""

    character: str = " "
    kind: Kind = "none"


Row = tuple[Cell, ...]


@dataclass(frozen=True)
class _Heights:
    """From a value to its row: row 0 is the top."""

    bottom: float
    top: float
    rows: int

    def exact(self, value: float) -> float:
        return (self.top - value) / (self.top - self.bottom) * (self.rows - 1)

    def row(self, value: float) -> int:
        return min(self.rows - 1, max(0, math.floor(self.exact(value) + 0.5)))

    def beyond(self, value: float) -> int:
        exact = self.exact(value)
        return -1 if exact < -0.5 else (1 if exact >= self.rows - 0.5 else 0)


def window_s(trace: Trace) -> float:
    """Return the length of the past that is shown (s)."""
    lasted = trace.read[-1][0] - trace.read[0][0] if trace.read else 0.0
    ahead = trace.expected[-1][0] - trace.read[-1][0] if trace.expected and trace.read else 0.0
    future = (1.0 - NOW_AT) / NOW_AT
    enough = [window for window in WINDOWS_S if window >= lasted] or [WINDOWS_S[-1]]
    wide = (window for window in enough if window * LEAST_FILLED <= lasted and ahead <= window * future)
    return next(wide, enough[0])


def trend_picture(width: int, height: int, trace: Trace) -> tuple[Row, ...]:
    """Return `height` rows of `width` cells: the last row holds the times.

    Nothing is drawn into less than 24 by 3.
    """
    blank = (tuple(Cell() for _ in range(max(0, width))),) * max(0, height)
    if width < 24 or height < 3 or not trace.high > trace.low:
        return blank
    gutter = max(len(text) for text in (trace.low_text, trace.high_text, trace.target_text)) + 1
    gutter = gutter if 1 < gutter <= width // 4 else 0
    columns, rows = width - gutter, height - 1
    past_s = window_s(trace)
    now_at = math.floor((columns - 1) * NOW_AT)
    slice_s = past_s / now_at
    heights = _heights(rows, trace, past_s)
    cells = [[Cell() for _ in range(columns)] for _ in range(rows)]
    _draw_lines(cells, heights, trace, now_at)
    now_s = trace.read[-1][0] if trace.read else 0.0
    first = math.floor(now_s / slice_s) - now_at
    _draw_expected(cells, heights, trace, first, slice_s, now_at)
    _draw_read(cells, heights, trace.read, first, slice_s)
    margins = _margins(rows, gutter, heights, trace)
    whole = [(*margin, *row) for margin, row in zip(margins, cells, strict=True)]
    return (*whole, _times(width, gutter, now_at, past_s, columns))


def _heights(rows: int, trace: Trace, past_s: float) -> _Heights:
    """Choose the scale: as far beyond each limit as the readings reach and the rows allow."""
    span = trace.high - trace.low
    since = trace.read[-1][0] - past_s if trace.read else 0.0
    values = [value for at, value in trace.read if at >= since and math.isfinite(value)]
    values += [value for _, value in trace.expected if math.isfinite(value)]
    values += [value for value in (trace.rest_low, trace.rest_high) if value is not None]
    most = max(0.0, (rows - 1) / 2.0 - 1.0)
    under = max((trace.low - value for value in values), default=0.0) / span
    over = max((value - trace.high for value in values), default=0.0) / span
    if rows == FEW_ROWS:
        room = span / 2.0
        return _Heights(
            bottom=trace.low - (room if under > over else 0.0),
            top=trace.high + (0.0 if under > over else room),
            rows=rows,
        )
    below = _reach(under, most - MARGIN)
    above = _reach(over, most - below)
    return _Heights(bottom=trace.low - below * span, top=trace.high + above * span, rows=rows)


def _reach(wanted: float, most: float) -> float:
    allowed = [reach for reach in REACHES if reach <= most] or [REACHES[0]]
    return next((reach for reach in allowed if wanted <= reach), allowed[-1])


def _draw_lines(cells: list[list[Cell]], heights: _Heights, trace: Trace, now_at: int) -> None:
    for row in cells:
        row[now_at] = Cell("│", "now")
    if trace.target is not None and trace.low <= trace.target <= trace.high:
        row = cells[heights.row(trace.target)]
        for column in range(0, len(row), 4):
            row[column] = row[column] if column == now_at else Cell("-", "target")
    for limit in (trace.low, trace.high):
        row = cells[heights.row(limit)]
        for column in range(len(row)):
            row[column] = Cell("┼" if column == now_at else "─", "limit")


def _draw_expected(
    cells: list[list[Cell]], heights: _Heights, trace: Trace, first: int, slice_s: float, now_at: int
) -> None:
    columns = len(cells[0])
    for column, value in enumerate(_slices(columns, trace.expected, first, slice_s, joined=True)):
        if value is None or column <= now_at or heights.beyond(value):
            continue
        row = heights.row(value)
        third = min(2, max(0, math.floor((heights.exact(value) - row + 0.5) * 3.0)))
        cells[row][column] = Cell(THIRDS[third], "expected")
    if trace.rest_low is None or trace.rest_high is None or not trace.expected:
        return
    top, bottom = heights.row(trace.rest_high), heights.row(trace.rest_low)
    middle = heights.row(trace.expected[-1][1])
    for row in range(top, bottom + 1):
        end = {top: "┬", bottom: "┴"}.get(row, "│")
        cells[row][columns - 1] = Cell("●" if row == middle or top == bottom else end, "rest")


def _draw_read(
    cells: list[list[Cell]], heights: _Heights, read: Sequence[tuple[float, float]], first: int, slice_s: float
) -> None:
    before: int | None = None
    for column, value in enumerate(_slices(len(cells[0]), read, first, slice_s)):
        if value is None:
            before = None
            continue
        row, beyond = heights.row(value), heights.beyond(value)
        if beyond:
            cells[row][column] = Cell("▲" if beyond < 0 else "▼", "read")
        else:
            between = range(row, row + 1)
            if before is not None:
                between = range(min(row, before + 1), max(row, before - 1) + 1)
            for at in between:
                cells[at][column] = Cell("█", "read")
        before = row


def _slices(
    columns: int, points: Sequence[tuple[float, float]], first: int, slice_s: float, *, joined: bool = False
) -> list[float | None]:
    """Return the mean in each slice; slices between two points that belong together get what lies between."""
    sums, counts = [0.0] * columns, [0] * columns
    found: list[float | None] = [None] * columns
    finite = [(at, value) for at, value in points if math.isfinite(at) and math.isfinite(value)]
    apart = sorted(later[0] - earlier[0] for earlier, later in itertools.pairwise(finite))
    most_s = math.inf if joined else max(LEAST_GAP_S, GAP * apart[len(apart) // 2] if apart else 0.0)
    for earlier, later in itertools.pairwise(finite):
        lasts = later[0] - earlier[0]
        if not 0.0 < lasts <= most_s:
            continue
        for number in range(math.floor(earlier[0] / slice_s) + 1, math.floor(later[0] / slice_s)):
            if 0 <= number - first < columns:
                share = ((number + 0.5) * slice_s - earlier[0]) / lasts
                found[number - first] = earlier[1] + share * (later[1] - earlier[1])
    for at, value in finite:
        column = math.floor(at / slice_s) - first
        if 0 <= column < columns:
            sums[column] += value
            counts[column] += 1
    for column, count in enumerate(counts):
        if count:
            found[column] = sums[column] / count
    return found


def _margins(rows: int, gutter: int, heights: _Heights, trace: Trace) -> list[Row]:
    texts = [""] * rows
    if gutter:
        if trace.target is not None:
            texts[heights.row(trace.target)] = trace.target_text
        texts[heights.row(trace.low)] = trace.low_text
        texts[heights.row(trace.high)] = trace.high_text
    return [tuple(Cell(character, "words") for character in f"{text} ".rjust(gutter)[:gutter]) for text in texts]


def _times(width: int, gutter: int, now_at: int, past_s: float, columns: int) -> Row:
    row = [" "] * width
    per_s = now_at / past_s
    free_from = 0
    for seconds in (-past_s, -past_s / 2.0, 0.0, past_s / 4.0, past_s / 2.0):
        at = gutter + now_at + round(seconds * per_s)
        text = _time_text(seconds)
        start = min(max(0, at - len(text) // 2), width - len(text))
        if start < free_from or at - gutter > columns:
            continue
        row[start : start + len(text)] = text
        free_from = start + len(text) + 2
    return tuple(Cell(character, "words") for character in row)


def _time_text(seconds: float) -> str:
    if seconds == 0.0:
        return "now"
    size = abs(seconds)
    number, unit = (size / 60.0, "min") if size >= 60.0 else (size, "s")
    return f"{'-' if seconds < 0 else '+'}{number:.3g} {unit}"
