"""What is shown of the supply: its state in two words and in a line, and how it is switched off.  Pure.

Rules
-----
* Off is claimed after a read-back, or "as you said" where only a person switches; nothing else counts.
* The words of an emergency are kept for one.  A supply that is being set, or has not been asked yet, is called that.
* What only a hand can switch is said to be so, with the hand's own way: the supply's switch, or the mains plug.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Final

from benchkit import quantities
from benchkit.events import SupplyState
from benchkit.procedure.hearing import never_on_by_hand, protection_text, switched_by_hand
from benchkit.procedure.items import Item
from benchkit.procedure.state import State
from benchkit.session.front import Energised, SupplyView

NO_HAND: Final = "nothing switches it off by itself"
"""Said all the time of what only a person switches."""

PULL_THE_PLUG: Final = "PULL THE PLUG"

NOT_ASKED: Final = "The supply has not said yet whether its output is on: it may be."

BEING_SET: Final = "The supply is being set, and has not been read back yet: treat the rails as live."

GOING_OFF: Final = "The supply is being switched off, and has not been read back yet: treat the rails as live."

EMERGENCY: Final = "SUPPLY: OUTPUT STATE UNKNOWN - treat the unit as live"


def supply_words(
    energised: Energised,
    supply: SupplyState | None,
    *,
    by_hand: bool,
    on_lamp: bool = False,
    unprotected: bool = False,
    by_word: bool = False,
) -> str:
    """Say what is known of the supply, never more than that.

    Parameters
    ----------
    energised : {"off", "on", "unknown"}
    supply : SupplyState or None
        The newest that was heard of it.
    by_hand : bool
        Only a person switches what feeds the unit.
    on_lamp : bool
        And that is a series lamp.
    unprotected : bool
        It tells of no over-voltage protection of its own.
    by_word : bool
        What is known comes from a person, although the supply itself could be asked.
    """
    if on_lamp:
        return f"MAINS THROUGH THE SERIES LAMP: {NO_HAND}, pull the plug by hand"
    if energised == "unknown" and not by_hand:
        return EMERGENCY
    tripped = "  TRIPPED by its own protection" if supply is not None and supply.tripped else ""
    if energised == "off":
        rest = f"as you said; {NO_HAND}" if by_hand else "as you said" if by_word else "read back as off"
        return f"SUPPLY OFF ({rest}){tripped}"
    parts = [f"SUPPLY IN YOUR HANDS: {NO_HAND}" if by_hand else "SUPPLY ON"]
    if by_hand and supply is not None:
        parts.append("you said:")
    if supply is not None:
        for volts, amps in ((supply.positive_v, supply.positive_a), (supply.negative_v, supply.negative_a)):
            if volts is not None:
                parts.append(
                    quantities.show(volts, "V") + ("" if amps is None else f" {quantities.show(amps, 'A', 3)}")
                )
        if supply.limit_a is not None:
            parts.append(f"limit {quantities.show(supply.limit_a, 'A', 3)}")
        if supply.in_limit:
            parts.append("IN LIMIT")
        protection = protection_text(supply)
        if protection:
            parts.append(f"protection {protection}")
    if unprotected:
        parts.append("NO OVER-VOLTAGE PROTECTION")
    return "  ".join(parts) + tripped


def supply_view(state: State, item: Item, supply: SupplyState | None, *, way_out: bool) -> SupplyView:
    """Draw what is known of the supply at one moment.

    Parameters
    ----------
    state : State
    item : Item
        The item that is being done.
    supply : SupplyState or None
        The newest that was heard of the supply.
    way_out : bool
        The walk is in its last section.
    """
    by_hand = switched_by_hand(state)
    if state.phase == "setting" and supply is not None and supply is not state.supply and supply.output_on is not None:
        state = replace(state, energised="on" if supply.output_on else "off")  # read back while it is being set
    by_word = state.energised == "off" and not by_hand and state.supply is None
    words = supply_words(
        state.energised, supply, by_hand=by_hand, on_lamp=state.on_lamp, unprotected=state.unprotected, by_word=by_word
    )
    view = SupplyView(energised=state.energised, words=words, by_hand=by_hand, state=supply)
    if state.on_lamp:
        told = state.phase == "asking" and item.kind == "lamp"
        label = "MAINS MAY BE ON" if told or state.phase == "securing" else "MAINS ON (you said)"
        return replace(view, label=label, hint=PULL_THE_PLUG)
    if by_hand:
        return _by_hand(view, state, over=way_out or state.phase in ("closing", "closed"))
    if by_word:
        return replace(view, label="SUPPLY OFF, YOU SAID")
    if state.energised != "unknown":
        return view
    if _not_asked(state):
        return replace(view, label="SUPPLY NOT ASKED YET", words=NOT_ASKED, calm=True)
    if state.phase == "setting":
        return replace(view, label="SUPPLY BEING SET", words=BEING_SET, calm=True)
    if state.phase == "switching off" and not state.unconfirmed:
        return replace(view, label="SUPPLY GOING OFF", words=GOING_OFF, calm=True)
    return view


def _by_hand(view: SupplyView, state: State, *, over: bool) -> SupplyView:
    if never_on_by_hand(state) and state.energised != "off":
        return replace(view, label="SUPPLY IN YOUR HANDS", hint="off BY HAND", calm=True, never_on=True)
    label = {"off": "SUPPLY OFF, YOU SAID", "on": "SUPPLY ON, YOU SAID", "unknown": "SUPPLY MAY BE ON"}[state.energised]
    return replace(view, label=label, hint="off BY HAND" if over or state.energised == "off" else "")


def _not_asked(state: State) -> bool:
    """Whether a supply that answers has not been asked yet, at the beginning or after going on; no failure so far."""
    if state.supply is not None or state.unconfirmed:
        return False
    return state.phase in ("unopened", "connecting") or (state.phase == "securing" and not state.missing)
