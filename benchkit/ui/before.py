"""What is true of the supply before a walk has begun: nobody has asked it anything."""

from __future__ import annotations

from benchkit.session.front import SupplyView
from benchkit.ui.entry import Opening

BY_HAND = "by hand"
"""What an opening calls an instrument that a person sets or reads."""


def before_the_walk(opening: Opening, *, pressed: bool = False) -> SupplyView:
    """Return what the off line says before there is anybody who could switch.

    Parameters
    ----------
    opening : Opening
    pressed : bool
        The off key was pressed meanwhile: it is said what it could do, which is nothing.

    Examples
    --------
    >>> before_the_walk(OPENING).label  # doctest: +SKIP
    'SUPPLY NOT ASKED YET'
    """
    if opening.kind == "rehearsal":
        words = "The simulated supply has not been asked yet; no real one is touched."
        key = "F9 SWITCHED NOTHING: the rehearsal has not begun."
    elif opening.supply == BY_HAND:
        words = "The supply is yours to switch, and may be on: nothing here switches it off."
        key = "F9 SWITCHED NOTHING: switch the supply off by hand."
    else:
        words = "benchkit has not asked the supply yet: it may be on. Until then only its own switch turns it off."
        key = "F9 SWITCHED NOTHING: no supply has been reached yet. Use its own switch."
    by_hand = opening.supply == BY_HAND
    return SupplyView(
        energised="unknown",
        words=f"{key} {words}" if pressed else words,
        by_hand=by_hand,
        state=None,
        label="SUPPLY IN YOUR HANDS" if by_hand else "SUPPLY NOT ASKED YET",
        hint="off BY HAND",
        calm=True,
        never_on=True,
    )


def left_before_the_walk(opening: Opening) -> str:
    """Return the last sentence when somebody leaves before the walk has begun; nothing was switched by then."""
    if opening.kind == "rehearsal":
        return "The rehearsal was not begun."
    if opening.supply == BY_HAND:
        return "The walk was not begun. The supply is yours to switch, and may be on."
    return "The walk was not begun. benchkit has not asked the supply anything: it may be on."
