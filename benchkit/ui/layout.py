"""Which of four layouts a terminal gets, without a terminal."""

from __future__ import annotations

from typing import Final, Literal

Layout = Literal["tiny", "small", "full", "roomy"]
LAYOUTS: Final[tuple[Layout, ...]] = ("tiny", "small", "full", "roomy")

SMALLEST: Final = (40, 12)
FULL: Final = (80, 24)
ROOMY: Final = (112, 34)


def layout_for(width: int, height: int) -> Layout:
    """Return the layout for a terminal of `width` columns and `height` rows.

    ``tiny`` says only that it is too small, ``small`` holds what a trim needs, ``full`` everything.

    Examples
    --------
    >>> layout_for(80, 24)
    'full'
    >>> layout_for(40, 11)
    'tiny'
    """
    if width < SMALLEST[0] or height < SMALLEST[1]:
        return "tiny"
    if width < FULL[0] or height < FULL[1]:
        return "small"
    if width < ROOMY[0] or height < ROOMY[1]:
        return "full"
    return "roomy"
