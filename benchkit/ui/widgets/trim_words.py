"""Words and numbers of the trim page, without a terminal."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final, Literal

from benchkit.judge.advice import Mood
from benchkit.quantities import show, show_within
from benchkit.session.front import LiveView
from benchkit.ui.widgets.ring_cells import Sense, amount_of, sense_of

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


def owed_words(turns: float) -> str:
    """Say how far the screw of a rehearsal is still to be turned by keys that were pressed already.

    Examples
    --------
    >>> owed_words(-1.02)
    'Still turning: 1.02 turns for LESS bias to come.'
    """
    return f"Still turning: {abs(turns):.2f} turns for {'MORE' if turns > 0.0 else 'LESS'} bias to come."


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


def plain_reading(live: LiveView) -> str:
    """Return a reading with no more places than a thousandth of the distance between its limits has.

    Examples
    --------
    >>> plain_reading(LiveView(point="p", unit="V", value=-410e-9, text="-410.00 nV", low=0.0, high=0.0012,
    ...                        target=0.0006, age_s=0.0, inside=False))
    '0 uV'
    """
    span = live.high - live.low
    if live.value is None or not math.isfinite(span) or span <= 0.0:
        return live.text
    return show_within(live.value, live.unit, span / 100.0)


def figure(value: float, unit: str) -> str:
    """Return a limit as it is written under the gauge."""
    return show(value, unit, 4)


def bare_figure(value: float, target: float, unit: str) -> str:
    """Return a limit in the steps of its target, without the unit: it stands where the unit has been said."""
    return in_step(value, target, unit).partition(" ")[0]


# -- what is going on, in shape and word ----------------------------------------------------------------------------

Tone = Literal["calm", "turn", "good", "alarm"]


@dataclass(frozen=True, kw_only=True)
class MoodLook:
    """How a mood is told: a shape that is a small picture of it, a word, and a tone."""

    shape: str
    word: str
    tone: Tone


MOOD_LOOKS: Final[dict[Mood, MoodLook]] = {
    "turn": MoodLook(shape="┌┐", word="TURN", tone="turn"),
    "steady": MoodLook(shape="═●═", word="AT REST", tone="calm"),
    "inside": MoodLook(shape="├●┤", word="INSIDE", tone="good"),
    "overshot": MoodLook(shape="├┤●", word="OVERSHOT", tone="alarm"),
    "wrong way": MoodLook(shape="●░├┤", word="WRONG WAY", tone="alarm"),
    "no response": MoodLook(shape="───", word="NO RESPONSE", tone="alarm"),
    "gone": MoodLook(shape="░ ░", word="READING GONE", tone="alarm"),
    "folded back": MoodLook(shape="┌──┐", word="SUPPLY IN ITS LIMIT", tone="alarm"),
    "running away": MoodLook(shape="▲▲▲", word="RUNNING AWAY", tone="alarm"),
}
"""A dot inside, beyond or away from the limits; a flat line; a curve cut flat; holes where the reading was."""

STALE_LOOK: Final = MoodLook(shape="▒▒▒", word="NO FRESH READING", tone="alarm")
MORE_LOOK: Final = MoodLook(shape="▲", word="TOO LOW", tone="turn")
LESS_LOOK: Final = MoodLook(shape="▼", word="TOO HIGH", tone="turn")
OVER_LOOK: Final = MoodLook(shape="├┤●", word="OVERSHOT, TOO HIGH", tone="alarm")
UNDER_LOOK: Final = MoodLook(shape="●├┤", word="OVERSHOT, TOO LOW", tone="alarm")
SHORT_WORDS: Final = {"TOO LOW": "LOW", "TOO HIGH": "HIGH", "INSIDE": "IN"}
"""Where there is no room for more."""

DO_NOT_TURN: Final = "do not turn"


def mood_look(live: LiveView, stale: bool = False) -> MoodLook:
    """Return how it is told what is going on; what has a side also says on which the reading lies."""
    if stale:
        return STALE_LOOK
    look = MOOD_LOOKS[live.mood]
    if live.mood == "turn":
        return {"below": MORE_LOOK, "above": LESS_LOOK, "inside": MOOD_LOOKS["inside"]}.get(where(live), look)
    if live.mood == "overshot":
        return {"below": UNDER_LOOK, "above": OVER_LOOK}.get(where(live), look)
    return look


def advice_words(live: LiveView, stale: bool = False) -> str:
    """Return the advice; where the session gives none, at least towards which end."""
    if stale:
        return DO_NOT_TURN
    if live.advice:
        return live.advice
    return {"below": "MORE bias", "above": "LESS bias"}.get(where(live), "") if live.mood == "turn" else ""


@dataclass(frozen=True, kw_only=True)
class RingLook:
    """What the ring beside the reading shows."""

    share: float
    sense: Sense
    centre: str
    tone: Literal["calm", "turn", "alarm"]


def ring_look(live: LiveView, stale: bool = False) -> RingLook | None:
    """Return the ring for a reading: how far to turn and which way, how far a soak is, or that something is wrong.

    None where there is nothing to tell.
    """
    look = mood_look(live, stale)
    if look.tone == "alarm" and (live.advised_turns is None or stale):
        return RingLook(share=1.0, sense="clockwise", centre="STOP", tone="alarm")
    sense = sense_of(live.advice)
    if live.advised_turns is not None and live.advised_turns != 0.0 and sense is not None:
        share = min(1.0, max(0.02, abs(live.advised_turns)))
        return RingLook(share=share, sense=sense, centre=amount_of(live.advice, live.advised_turns), tone="turn")
    if live.settled_share is not None:
        share = min(1.0, max(0.0, live.settled_share))
        return RingLook(share=share, sense="clockwise", centre=f"{share * 100:.0f} %", tone="calm")
    return None


def target_words(live: LiveView) -> str:
    """Return target and limits in one line.

    Examples
    --------
    >>> target_words(LiveView(point="p", unit="V", value=None, text="", low=0.018, high=0.022, target=0.02, age_s=0.0,
    ...                       inside=False))
    'target 20.00 mV, from 18.00 to 22.00'
    """
    low, high = (bare_figure(limit, live.target, live.unit) for limit in (live.low, live.high))
    return f"target {in_step(live.target, live.target, live.unit)}, from {low} to {high}"


def target_in_steps(live: LiveView) -> str:
    """Return the widest reading that is to be expected, for figures that keep their place."""
    return in_step(max(abs(live.target), abs(live.high)), live.target, live.unit)
