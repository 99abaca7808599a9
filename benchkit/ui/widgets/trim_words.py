"""Words and numbers of the trim page, without a terminal."""

from __future__ import annotations

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


def where(live: LiveView) -> Literal["inside", "below", "above", "nowhere"]:
    """Return on which side of the limits a reading lies; whether it is inside is the session's word."""
    if live.inside:
        return "inside"
    if live.value is None:
        return "nowhere"
    return "below" if live.value < live.target else "above"


def figure(value: float, unit: str) -> str:
    """Return a limit as it is written under the gauge."""
    return show(value, unit, 4)
