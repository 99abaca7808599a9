"""Switching a supply off, and what it takes to believe that it is off.

Rules
-----
* "Off" needs nothing to be in step: it is sent first, and only then is the link put in order and the supply asked.
* It is confirmed when both outputs read back as off, no current flows, and the voltage at the terminals falls or is
  low.  Capacitors may hold the voltage: then the words say how much is still there, and off is confirmed all the same.
* A supply that measures no current has to show the falling voltage; one that doesn't read back its outputs has to show
  low voltage without current.
* A supply that still says "on" is told again; a link that fails is closed and opened anew once.  Otherwise the words
  are: output state unknown, switch it off by hand.
* Whatever happens becomes words, never an exception.
"""

from __future__ import annotations

import time
from dataclasses import dataclass, field, replace
from typing import Any

from benchkit.errors import InstrumentError
from benchkit.events import SupplyState
from benchkit.instruments.conversation import Conversation
from benchkit.instruments.dialect import SupplyTalk

OFF_TIMEOUT_S = 1.2
"""How long each answer may take while "off" is being confirmed, s."""

UNKNOWN = "output state unknown: switch it off by hand"

LOW_V = 2.0
"""Below it a rail counts as low, V (our own figure)."""

_QUESTIONS = (("output", "amps", "volts"),)
_ONE_BY_ONE = (("output",), ("amps",), ("volts",))
"""What speaks against "off" is believed although the link fails at the next question."""

_LINKS = 2
_LOOKS = 3
_BUDGET_S = 2.5
_PAUSE_S = 0.05
_FALL_PAUSE_S = 0.12
_FALL_SHARE = 0.002


@dataclass(frozen=True, kw_only=True)
class OffOutcome:
    """What became of an "off": confirmed or not, in words, and the last that the supply said."""

    confirmed: bool
    how: str
    state: SupplyState | None


@dataclass
class Memory:
    """What a supply said or was told last; only its owner thread touches it.

    Parameters
    ----------
    state : SupplyState
        The last look.
    told : pair of bool or None
        What the outputs were switched to over this opening of the link; for a supply that doesn't read them back.
    told_openings : int
        Which opening that was.
    over_current : bool or None
        Whether over-current protection is on, as far as known.
    over_current_openings : int
        Over which opening of the link that was.
    seen_on : bool
        Whether the supply has said since the last confirmed "off" that an output is on or that current flows.
    off_confirmed : bool
        Whether the last thing done was an "off" that was confirmed; no setting has been begun since.
    """

    state: SupplyState = field(default_factory=SupplyState)
    told: tuple[bool, bool] | None = None
    told_openings: int = -1
    over_current: bool | None = None
    over_current_openings: int = -1
    seen_on: bool = False
    off_confirmed: bool = False


def switch_off(conversation: Conversation, talk: SupplyTalk, memory: Memory) -> OffOutcome:
    """Switch off and confirm it, within a bounded time."""
    deadline_s = time.monotonic() + _BUDGET_S
    with conversation.impatient(OFF_TIMEOUT_S, repeats=False):
        return _within(conversation, talk, memory, deadline_s)


def say_off(conversation: Conversation, talk: SupplyTalk) -> None:
    """Send "off", whatever state the link is in; nothing is asked."""
    commands = talk.profile.commands
    for message in talk.commands(commands.off, ({}, {})):
        if conversation.settings.gap_s:
            time.sleep(conversation.settings.gap_s)
        conversation.tell_at_once(message)


def _within(conversation: Conversation, talk: SupplyTalk, memory: Memory, deadline_s: float) -> OffOutcome:
    problem = ""
    state: SupplyState | None = None
    links = looks = 0
    while links < _LINKS and looks < _LOOKS:
        try:
            say_off(conversation, talk)
            looks += 1
            for keys in _QUESTIONS if talk.profile.questions.joined else _ONE_BY_ONE:
                seen = talk.ask_all(conversation, keys)
                state = memory.state = state_of(talk, seen, memory.state)
                problem = _against(talk, seen)
                if problem:
                    memory.seen_on = True
                    break
            if not problem:
                return _confirmed(conversation, talk, memory, deadline_s)
        except Exception as error:
            problem = str(error)
            links += 1
            if state is not None:
                state = replace(state, output_on=None)
            conversation.close()
        if time.monotonic() > deadline_s:
            break
        time.sleep(_PAUSE_S)
    memory.state = replace(memory.state, output_on=None)
    return OffOutcome(confirmed=False, how=f"{UNKNOWN} ({problem.rstrip('.')})", state=state)


def state_of(talk: SupplyTalk, seen: dict[str, Any], before: SupplyState) -> SupplyState:
    """Return what a look says; what it did not ask for stays as it was before."""
    sign = -1.0 if talk.profile.negative_programmed_positive else 1.0
    state = replace(before, positive_in_limit=False, negative_in_limit=False)
    if "output" in seen:
        state = replace(state, output_on=any(seen["output"]))
    if "volts" in seen:
        volts = seen["volts"]
        state = replace(state, positive_v=volts[0], negative_v=sign * volts[1] + 0.0)
    if "amps" in seen:
        amps = seen["amps"]
        state = replace(state, positive_a=amps[0], negative_a=-sign * amps[1] + 0.0)
    if "set_volts" in seen:
        volts = seen["set_volts"]
        state = replace(state, set_positive_v=volts[0], set_negative_v=sign * volts[1] + 0.0)
    if "limits" in seen:
        state = replace(state, limit_a=max(seen["limits"]))
    if "over_voltage" in seen:
        levels = seen["over_voltage"]
        state = replace(state, protection_positive_v=abs(levels[0]), protection_negative_v=abs(levels[1]))
    trips = [seen[key] for key in ("tripped", "over_current_tripped") if key in seen]
    if trips:
        state = replace(
            state,
            positive_tripped=any(pair[0] for pair in trips),
            negative_tripped=any(pair[1] for pair in trips),
        )
    return state


def words(outputs: tuple[bool, bool]) -> str:
    """Return both outputs' states in words."""
    each = ["on" if output else "off" for output in outputs]
    return f"both {each[0]}" if outputs[0] == outputs[1] else f"positive {each[0]}, negative {each[1]}"


def flows(talk: SupplyTalk, state: SupplyState) -> bool:
    """Whether more current flows than an output that is off may show."""
    amps = (abs(state.positive_a or 0.0), abs(state.negative_a or 0.0))
    return max(amps) > talk.profile.off_current_a


def _against(talk: SupplyTalk, seen: dict[str, Any]) -> str:
    """Return what speaks against "off", or nothing."""
    if "output" in seen and any(seen["output"]):
        return f"the outputs still read back as {words(seen['output'])}"
    amps = seen.get("amps")
    if amps is not None and max(abs(amps[0]), abs(amps[1])) > talk.profile.off_current_a:
        return f"{amps[0]:.3f} A and {amps[1]:.3f} A still flow"
    return ""


def _confirmed(conversation: Conversation, talk: SupplyTalk, memory: Memory, deadline_s: float) -> OffOutcome:
    """Look at the voltage too, now that nothing else speaks against "off"."""
    reads_back, has_amps = talk.has("output"), talk.has("amps")
    first = _magnitudes(memory.state)
    while True:
        low = max(first) < LOW_V
        falls = False
        if not low:
            time.sleep(_FALL_PAUSE_S)
            try:
                memory.state = state_of(talk, talk.ask_all(conversation, ("volts",)), memory.state)
            except InstrumentError as error:
                if not (reads_back and has_amps):
                    return OffOutcome(confirmed=False, how=f"{UNKNOWN} ({error})", state=memory.state)
            now = _magnitudes(memory.state)
            low = max(now) < LOW_V
            falls = all(
                after < LOW_V or after < before - max(talk.profile.volts_tolerance_v, _FALL_SHARE * before)
                for before, after in zip(first, now, strict=True)
            )
        if low or (reads_back and (falls or has_amps)):
            break
        if time.monotonic() > deadline_s:
            missing = "it does not read back its outputs" if not reads_back else "it measures no current"
            return OffOutcome(
                confirmed=False,
                how=f"{UNKNOWN} ({_volts(memory.state)} at the supply do not fall, and {missing})",
                state=memory.state,
            )
    if not reads_back:
        memory.state = replace(memory.state, output_on=False)
    said = ["both outputs read back as off" if reads_back else "the supply does not read back its outputs"]
    said += ["no current flows"] if has_amps else []
    where = "at the supply" if low else "at the supply, and falling" if falls else "still at the terminals"
    how = f"{', '.join(said)}; {_volts(memory.state)} {where}"
    if memory.state.tripped:
        how += "; its own protection had tripped"
    return OffOutcome(confirmed=True, how=how, state=memory.state)


def _magnitudes(state: SupplyState) -> tuple[float, float]:
    return (abs(state.positive_v or 0.0), abs(state.negative_v or 0.0))


def _volts(state: SupplyState) -> str:
    positive_v, negative_v = (round(volts or 0.0, 2) + 0.0 for volts in (state.positive_v, state.negative_v))
    return f"{positive_v:.2f} V and {negative_v:.2f} V"
