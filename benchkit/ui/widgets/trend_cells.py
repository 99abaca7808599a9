"""The last seconds of a reading as rows of characters: one column a slice of time, one mark a column.

Limits are drawn as lines across, so that one sees a reading creep towards them.  A column that holds several readings
shows their mean; one that holds none stays empty, because a gap is news too.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

from benchkit.ui.widgets.gauge_scale import MARGIN


def trend_rows(
    width: int,
    height: int,
    trend: Sequence[tuple[float, float]],
    low: float,
    high: float,
    *,
    target: float | None = None,
    window_s: float | None = None,
) -> tuple[str, ...]:
    """Return `height` rows of `width` cells, the newest reading at the right.

    Parameters
    ----------
    width, height : int
        Cells; nothing is drawn into fewer than 2 by 3.
    trend : sequence of (seconds, value)
        Oldest first.
    low, high, target : float
        Limits and target, in the unit of the values.
    window_s : float or None
        Time across the whole width (s); None: what the trend covers.

    Returns
    -------
    tuple of str
        A reading above or below what is shown appears as a triangle in the first or last row.
    """
    if width < 2 or height < 3 or not high > low:
        return (" " * max(0, width),) * max(0, height)
    span = high - low
    top, bottom = high + MARGIN * span, low - MARGIN * span

    def row_of(value: float) -> int:
        return min(height - 1, max(0, math.floor((top - value) / (top - bottom) * (height - 1) + 0.5)))

    cells = [[" "] * width for _ in range(height)]
    if target is not None and low <= target <= high:
        cells[row_of(target)] = list(("· " * width)[:width])
    for limit in (low, high):
        cells[row_of(limit)] = ["─"] * width
    for column, value in enumerate(_columns(width, trend, window_s)):
        if value is None:
            continue
        if value > top:
            cells[0][column] = "▲"
        elif value < bottom:
            cells[height - 1][column] = "▼"
        else:
            cells[row_of(value)][column] = "█"
    return tuple("".join(row) for row in cells)


def _columns(width: int, trend: Sequence[tuple[float, float]], window_s: float | None) -> list[float | None]:
    sums = [0.0] * width
    counts = [0] * width
    if trend:
        last = trend[-1][0]
        window = window_s if window_s is not None else last - trend[0][0]
        for seconds, value in trend:
            back = last - seconds
            if not math.isfinite(value) or back < 0.0 or back > window:
                continue
            column = width - 1 - (math.floor(back / window * (width - 1) + 0.5) if window > 0.0 else 0)
            sums[column] += value
            counts[column] += 1
    return [total / count if count else None for total, count in zip(sums, counts, strict=True)]
