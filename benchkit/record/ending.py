"""What a record shows of the supply at its end: off and how that is known, still on, or nobody knows."""

from __future__ import annotations

from typing import Final

from benchkit.events import OutputOff
from benchkit.record.facts import Ending

NEVER_ON: Final = "Never switched on during this walk."


def ending_of(ever_on: bool, may_be_on: bool, off: OutputOff | None, *, by_hand: bool = False) -> Ending:
    """Say what the record shows of the supply at its end; of one that only a person switches, what that person said."""
    if by_hand:
        if not may_be_on:
            words = "Off, as said by the operator; benchkit had no hand on it." if ever_on or off else NEVER_ON
            return Ending(state="off" if ever_on or off else "never on", words=words)
        return Ending(state="unknown", words="In the operator's hands, and nobody said that it is off: look at it.")
    if off is not None and not off.confirmed:
        return Ending(
            state="unknown",
            words=f"Output state unknown: switch it off by hand. It did not confirm off ({off.how}).",
        )
    if may_be_on:
        return Ending(
            state="on",
            words="No line says that the supply is off after it was last on. Take it as on until you have seen it off.",
        )
    if off is not None:
        return Ending(state="off", words=f"Off, and confirmed: {off.how}.")
    if ever_on:
        return Ending(state="off", words="Off, as the supply said when it was last asked.")
    return Ending(state="never on", words=NEVER_ON)


def with_lamp(supply: Ending, on_at: str, off_at: str, *, by_hand: bool) -> Ending:
    """Say what the record shows of mains through a series lamp, and of the supply where that was another one."""
    if not on_at:
        return supply
    lamp = f"Mains through the series lamp from {on_at}"
    if off_at:
        lamp += f"; off at {off_at}, as said by the operator: benchkit had no hand on it."
    else:
        lamp += ", and nobody said that it is off: take the unit as live until its plug is seen pulled."
    state = "off" if off_at else "unknown"
    if supply.state == "never on" or by_hand:
        return Ending(state=state, words=lamp)
    worst = state if supply.state == "off" else supply.state
    return Ending(state=worst, words=f"{lamp} The bench's supply: {supply.words}")
