"""A small plot in plain characters: curves over the output current, for any terminal or printer.

Only ASCII is drawn. Each curve has a mark; where two meet, the one that is named later is seen.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

WIDTH, HEIGHT = 61, 13
"""Columns and rows of the field that curves are drawn in."""
LABEL = 9
"""Columns for the figures at the left."""


@dataclass(frozen=True)
class Curve:
    """A curve: its mark (one ASCII character) and its points, `x` rising."""

    mark: str
    x: Array
    y: Array


def plot(curves: Sequence[Curve], reach: float, *, unit: str = "A", digits: int = 4) -> list[str]:
    """Draw curves from -reach to +reach.

    Parameters
    ----------
    curves : sequence of Curve
        Each must cover the range.
    reach : float
        Of x, either way.
    unit : str
        Of x.
    digits : int
        Decimals of the figures at the left.

    Returns
    -------
    list of str
        `HEIGHT` rows, the axis and its figures; no row longer than `LABEL` + 2 + `WIDTH`.
    """
    x = np.linspace(-reach, reach, WIDTH)
    heights = [np.interp(x, curve.x, curve.y) for curve in curves]
    low, high = min(float(y.min()) for y in heights), max(float(y.max()) for y in heights)
    if high - low < 10.0**-digits:
        low, high = low - 0.5 * 10.0**-digits, high + 0.5 * 10.0**-digits
    cells = [[" "] * WIDTH for _ in range(HEIGHT)]
    for curve, y in zip(curves, heights, strict=True):
        rows = np.rint((high - y) / (high - low) * (HEIGHT - 1)).astype(int)
        for column, row in enumerate(rows):
            # A steep curve is drawn through, so that it stays one line.
            before = rows[column - 1] if column else row
            for between in range(min(row, before + 1), max(row, before - 1) + 1):
                cells[between][column] = curve.mark
    lines = []
    for number, row_cells in enumerate(cells):
        share = 1.0 - number / (HEIGHT - 1)
        figure = _figure(low + share * (high - low), digits) if number % 3 == 0 else ""
        lines.append(f"{figure:>{LABEL}} |{''.join(row_cells)}".rstrip())
    lines.append(f"{'':>{LABEL}} +{'-' * (WIDTH // 2)}+{'-' * (WIDTH - WIDTH // 2 - 1)}")
    left, right = f"{-reach:.3g} {unit}", f"+{reach:.3g} {unit}"
    axis = [" "] * WIDTH
    axis[: len(left)], axis[WIDTH // 2], axis[WIDTH - len(right) :] = left, "0", right
    lines.append(f"{'':>{LABEL}}  {''.join(axis)}".rstrip())
    return lines


def _figure(value: float, digits: int) -> str:
    text = f"{value:.{digits}f}"
    return text if len(text) <= LABEL else f"{value:.2g}"
