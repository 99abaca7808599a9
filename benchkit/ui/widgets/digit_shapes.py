"""Figures that can be read from across a bench, built of full blocks alone.

Each figure is three cells wide and five rows high: three strokes across (rows 1, 3 and 5) and two rows of stems between
them.  A size repeats cells sideways, strokes by their thickness and stems by their length, so that strokes stay even in
a terminal whose cells are about twice as high as wide.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final


@dataclass(frozen=True)
class FigureSize:
    """How often cells are repeated sideways, and how many rows a stroke and a stem take."""

    across: int
    stroke: int
    stem: int

    @property
    def rows(self) -> int:
        """Rows of a figure."""
        return 3 * self.stroke + 2 * self.stem


SIZES: Final = (
    FigureSize(5, 2, 3),
    FigureSize(4, 2, 2),
    FigureSize(3, 1, 2),
    FigureSize(2, 1, 1),
    FigureSize(1, 1, 1),
)
"""The largest first."""

SMALLEST: Final = SIZES[-1]

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
    "/": ("  #", "  #", " # ", "#  ", "#  "),
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


def fit(text: str, width: int, height: int) -> FigureSize | None:
    """Return the largest size in which `text` fits, or None when none does."""
    if not drawable(text):
        return None
    for size in SIZES:
        if width_of(text, size.across) <= width and size.rows <= height:
            return size
    return None


def big_rows(text: str, size: FigureSize = SMALLEST, ink: str = "█") -> tuple[str, ...]:
    r"""Return `text` drawn large, as rows of equal width.

    Parameters
    ----------
    text : str
        Figures, signs, point and space; see `drawable`.
    size : FigureSize
    ink : str
        What the strokes are made of.

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
    for row, times in enumerate((size.stroke, size.stem, size.stroke, size.stem, size.stroke)):
        line = (" " * size.across).join(
            "".join((ink if cell == "#" else " ") * size.across for cell in _SHAPES[character][row])
            for character in text
        )
        rows.extend([line] * times)
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
