"""Numbers that mark a place in the stream of an instrument's answers.

A mark is sent in a question whose answer holds it, and is not used again before many others were: an answer with this
number can't be a leftover.  Numbers fit a register of eight bits, as ``*ESE`` has it (IEEE 488.2, 10.10); those that
are likely as an answer to anything else, small ones and such with one or two bits, are left out.
"""

from __future__ import annotations

import random
import re

MARKS = tuple(number for number in range(17, 255) if number.bit_count() >= 3)

_source = random.SystemRandom()


class Marks:
    """Hands out marks; none comes again before half of all the others were used."""

    def __init__(self) -> None:
        self._order = list(MARKS)
        _source.shuffle(self._order)

    def fresh(self) -> int:
        """Return the next mark."""
        mark = self._order.pop(_source.randrange(len(self._order) // 2))
        self._order.append(mark)
        return mark


def shows(line: str, mark: int) -> bool:
    """Tell whether a line is the answer that holds this mark: its digits are the only ones, and no fraction."""
    return re.fullmatch(rf"[^0-9.,]*0*{mark}[^0-9.,]*", line.strip()) is not None
