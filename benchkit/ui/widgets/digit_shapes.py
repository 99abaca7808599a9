"""Figures that can be read from across a bench, built of full blocks alone.

Each figure is three cells wide and five rows high; scaling repeats cells, so that strokes stay even in a terminal whose
cells are about twice as high as wide.
"""

from __future__ import annotations

from typing import Final

ROWS: Final = 5
SCALES: Final[tuple[tuple[int, int], ...]] = ((4, 2), (2, 1), (1, 1))
"""Horizontal and vertical repetition, the largest first."""

_SHAPES: Final[dict[str, tuple[str, str, str, str, str]]] = {
    "0": ("###", "# #", "# #", "# #", "###"),
    "1": (" # ", "## ", " # ", " # ", "###"),
    "2": ("###", "  #", "###", "#  ", "###"),
    "3": ("###", "  #", " ##", "  #", "###"),
    "4": ("# #", "# #", "###", "  #", "  #"),
    "5": ("###", "#  ", "###", "  #", "###"),
    "6": ("###", "#  ", "###", "# #", "###"),
    "7": ("###", "  #", "  #", "  #", "  #"),
    "8": ("###", "# #", "###", "# #", "###"),
    "9": ("###", "# #", "###", "  #", "###"),
    "-": ("   ", "   ", "###", "   ", "   "),
    "+": ("   ", " # ", "###", " # ", "   "),
    ".": (" ", " ", " ", " ", "#"),
    " ": ("   ", "   ", "   ", "   ", "   "),
    "O": ("###", "# #", "# #", "# #", "###"),
    "L": ("#  ", "#  ", "#  ", "#  ", "###"),
}


def drawable(text: str) -> bool:
    """Return whether every character of `text` has a shape."""
    return bool(text) and all(character in _SHAPES for character in text)


def width_of(text: str, across: int) -> int:
    """Return the width (cells) of `text` when each cell is repeated `across` times."""
    if not text:
        return 0
    return across * (sum(len(_SHAPES[character][0]) for character in text) + len(text) - 1)


def fit(text: str, width: int, height: int) -> tuple[int, int] | None:
    """Return the largest scale (across, down) in which `text` fits, or None when none does."""
    if not drawable(text):
        return None
    for across, down in SCALES:
        if width_of(text, across) <= width and ROWS * down <= height:
            return across, down
    return None


def big_rows(text: str, across: int = 1, down: int = 1, ink: str = "█") -> tuple[str, ...]:
    r"""Return `text` drawn large, as rows of equal width.

    Parameters
    ----------
    text : str
        Figures, signs, point and space; see `drawable`.
    across, down : int
        How often each cell is repeated.

    Raises
    ------
    KeyError
        For a character without a shape.

    Examples
    --------
    >>> print("\n".join(big_rows("-7", ink="#")))
        ###
          #
    ###   #
          #
          #
    """
    rows = []
    for row in range(ROWS):
        line = (" " * across).join(
            "".join((ink if cell == "#" else " ") * across for cell in _SHAPES[character][row]) for character in text
        )
        rows.extend([line] * down)
    return tuple(rows)


def split_reading(text: str) -> tuple[str, str]:
    """Return the figures and the unit of a shown reading.

    Examples
    --------
    >>> split_reading("20.31 mV")
    ('20.31', 'mV')
    >>> split_reading("overload")
    ('OL', 'overload')
    """
    if text.strip().lower() == "overload":
        return "OL", "overload"
    number, _, unit = text.strip().partition(" ")
    return number, unit.strip()
