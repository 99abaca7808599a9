"""What an adviser says to the hand on the screw; the adviser itself is in `benchkit.judge.trimming`."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

Mood = Literal[
    "steady", "turn", "inside", "overshot", "wrong way", "no response", "gone", "folded back", "running away"
]  # fmt: skip

Source = Literal["the model", "this unit", "nothing yet"]


@dataclass(frozen=True, kw_only=True)
class Advice:
    """What to do with the screw now.

    Parameters
    ----------
    mood : str
    words : str
        One line, ready to show.
    turns : float or None
        Positive for more bias; None where nothing is to be turned.
    slope_source : str
        What the amount rests on.
    calm : bool
        The reading stands still, or only creeps.
    moved_s : float or None
        When the last move of the screw was seen to end.
    """

    mood: Mood
    words: str
    turns: float | None
    slope_source: Source
    calm: bool
    moved_s: float | None
