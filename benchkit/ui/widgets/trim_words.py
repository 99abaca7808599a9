"""Words and numbers of the trim page, without a terminal."""

from __future__ import annotations

import math
from typing import Final, Literal

from benchkit.quantities import show
from benchkit.session.front import LiveView

STALE_AFTER_S: Final = 1.5
"""A reading older than this is not to be trimmed by (s)."""

TURNS: Final[dict[str, float]] = {
    "left": -0.02,
    "right": 0.02,
    "down": -0.25,
    "up": 0.25,
    "pagedown": -1.0,
    "pageup": 1.0,
}
"""Turns of the screw that a key stands for in a rehearsal; positive for more bias."""

TURN_KEYS: Final = "MORE bias: right 1/50 turn, up 1/4, page up 1; less: left, down, page down"
"""The same in words, in one line of 78 cells."""


def where(live: LiveView) -> Literal["inside", "below", "above", "nowhere"]:
    """Return on which side of the limits a reading lies; whether it is inside is the session's word."""
    if live.inside:
        return "inside"
    if live.value is None:
        return "nowhere"
    return "below" if live.value < live.target else "above"


def in_step(value: float, target: float, unit: str) -> str:
    """Return a reading in the unit and to the decimals in which its target is written.

    A large "5.720" must not mean microvolts beside a target of 5.500 mV.
    """
    prefixes = ((1.0, ""), (1e-3, "m"), (1e-6, "u"))
    size = abs(target) or 1.0
    factor, prefix = next(((f, p) for f, p in prefixes if size >= f * (1.0 - 1e-9)), prefixes[-1])
    decimals = max(0, 3 - math.floor(math.log10(size / factor)))
    return f"{value / factor:.{decimals}f} {prefix}{unit}"


def figure(value: float, unit: str) -> str:
    """Return a limit as it is written under the gauge."""
    return show(value, unit, 4)
