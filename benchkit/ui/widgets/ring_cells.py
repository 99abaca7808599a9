"""A ring of cells, part of which is filled: how far to turn the screw, or how far a soak is.

The ring begins at the top.  To turn the screw it is filled in the sense in which it is to be turned, as far as it is to
be turned; so a quarter turn anticlockwise fills the quarter from the top to the left.  What stands in the middle says
the same in figures.
"""

from __future__ import annotations

import math
import re
from fractions import Fraction
from typing import Final, Literal

from benchkit.ui.widgets.digit_shapes import big_rows, drawable, width_of

Sense = Literal["clockwise", "anticlockwise"]

FULL: Final = "█"
REST: Final = "░"
ROWS_FOR_FIGURES: Final = 10
"""A ring this high has room for large figures in its middle."""

FRACTIONS: Final = (1, 2, 3, 4, 6, 8, 16, 50)
"""Parts of a turn that people turn by."""


def sense_of(advice: str) -> Sense | None:
    """Return the sense of rotation that a piece of advice names.

    Examples
    --------
    >>> sense_of("a quarter turn anticlockwise")
    'anticlockwise'
    """
    found = re.search(r"\b(anti)?clockwise\b", advice.lower())
    if found is None:
        return None
    return "anticlockwise" if found.group(1) else "clockwise"


def turns_text(turns: float) -> str:
    """Return a number of turns as a person says it.

    Examples
    --------
    >>> [turns_text(turns) for turns in (0.25, -0.12, 1.5, 2.02, 0.02)]
    ['1/4', '1/8', '1 1/2', '2', '1/50']
    """
    size = abs(turns)
    whole = math.floor(size)
    rest = size - whole
    finest = max(FRACTIONS) if size < 0.3 else 8
    candidates = {
        Fraction(part, of) for of in FRACTIONS if of <= finest for part in (range(of + 1) if of < 9 else (1,))
    }
    nearest = min(candidates, key=lambda part: (abs(float(part) - rest), part.denominator))
    if whole == 0 and nearest == 0:
        return "a touch"
    total = whole + nearest
    whole, part = divmod(total.numerator, total.denominator)
    words = [str(whole)] if whole else []
    if part:
        words.append(f"{part}/{total.denominator}")
    return " ".join(words)


def amount_of(advice: str, turns: float) -> str:
    """Return what stands in the ring for a piece of advice: the words' own degrees or touch, else the turns.

    Examples
    --------
    >>> [amount_of("about 35 degrees clockwise", -0.1), amount_of("a quarter turn anticlockwise", 0.25)]
    ['35°', '1/4']
    """
    degrees = re.search(r"(\d+) degrees", advice)
    if degrees is not None:
        return f"{degrees.group(1)}°"
    return "touch" if "a touch" in advice else turns_text(turns)


def ring_rows(
    rows: int, share: float, *, sense: Sense = "clockwise", full: str = FULL, rest: str = REST, centre: str = ""
) -> tuple[str, ...]:
    """Return a ring `rows` high and about twice as wide, filled from the top by `share` (0 to 1).

    Examples
    --------
    >>> for row in ring_rows(5, 0.25, full="#", centre="1/4"):
    ...     print(row.rstrip())
      ░░░####
    ░░       ##
    ░   1/4   #
    ░░       ░░
      ░░░░░░░
    """
    if rows < 3:
        return (centre,) * min(1, rows)
    width = ring_width(rows)
    middle_y, middle_x = (rows - 1) / 2.0, (width - 1) / 2.0
    cells = [[" "] * width for _ in range(rows)]
    steps = 8 * rows
    share = min(1.0, max(0.0, share))
    for step in range(steps):
        turned = step / steps
        angle = 2.0 * math.pi * turned * (1.0 if sense == "clockwise" else -1.0)
        x = round(middle_x + middle_x * math.sin(angle))
        y = round(middle_y - middle_y * math.cos(angle))
        if turned < share or share >= 1.0:
            cells[y][x] = full
        elif cells[y][x] == " ":
            cells[y][x] = rest
    lines = _centre(rows, centre)
    for y, line in enumerate(lines):
        start = max(0, round(middle_x - (len(line) - 1) / 2.0))
        row = cells[math.floor(middle_y) + y - (len(lines) - 1) // 2]
        for at, character in enumerate(line[: max(0, width - start)]):
            row[start + at] = character
    return tuple("".join(row) for row in cells)


def _centre(rows: int, centre: str) -> tuple[str, ...]:
    """Return what stands in the middle: large figures where they have room, else a word."""
    width = ring_width(rows)
    if rows >= ROWS_FOR_FIGURES and drawable(centre) and width_of(centre, 1) <= width - 10:
        return big_rows(centre)
    return (centre[: max(0, width - 4)],)


def ring_width(rows: int) -> int:
    """Return the width of a ring that is `rows` high."""
    return 2 * rows + 1
