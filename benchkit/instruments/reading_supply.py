"""Looking at a supply: outputs, settings, measurements, protection, and what its error queue holds."""

from __future__ import annotations

from dataclasses import dataclass, replace

from benchkit.errors import InstrumentError
from benchkit.events import SupplyState
from benchkit.instruments.conversation import Conversation
from benchkit.instruments.dialect import SupplyTalk, ask_series
from benchkit.instruments.numbers import visible
from benchkit.instruments.switching_off import Memory, flows, state_of

_LOOK = (
    "output",
    "set_volts",
    "limits",
    "volts",
    "amps",
    "in_limit",
    "tripped",
    "over_current_tripped",
)
_LIMIT_SHARE = 0.01
"""A measured current counts as the limit from this share below it on (our own figure)."""


@dataclass(frozen=True, kw_only=True)
class Sample:
    """One look at the supply: its state, and each output's switch (positive, negative) as read back."""

    state: SupplyState
    outputs: tuple[bool, bool]


def read_sample(conversation: Conversation, talk: SupplyTalk, memory: Memory) -> Sample:
    """Ask everything that a look at the supply needs; the protection's level only while it is not known."""
    keys = _LOOK if memory.state.protection_positive_v is not None else (*_LOOK, "over_voltage")
    seen = talk.ask_all(conversation, keys)
    outputs = seen["output"] if "output" in seen else read_outputs(conversation, talk, memory)
    state = replace(state_of(talk, seen, memory.state), output_on=any(outputs))
    held = seen["in_limit"] if "in_limit" in seen else _held(talk, state, outputs)
    state = replace(state, positive_in_limit=bool(held[0]), negative_in_limit=bool(held[1]))
    memory.state = state
    if any(outputs) or flows(talk, state):
        memory.seen_on = True
    return Sample(state=state, outputs=(bool(outputs[0]), bool(outputs[1])))


def read_outputs(conversation: Conversation, talk: SupplyTalk, memory: Memory) -> tuple[bool, bool]:
    """Return the outputs as read back; as told where they aren't, and as on where nobody knows."""
    if talk.has("output"):
        pair = talk.ask(conversation, "output")
        return (bool(pair[0]), bool(pair[1]))
    if conversation.openings == 0:
        conversation.open()
    known = memory.told is not None and memory.told_openings == conversation.openings
    return memory.told if known and memory.told is not None else (True, True)


def read_trips(conversation: Conversation, talk: SupplyTalk, memory: Memory) -> SupplyState:
    """Ask whether a protection has tripped."""
    seen = talk.ask_all(conversation, ("tripped", "over_current_tripped"))
    memory.state = state_of(talk, seen, memory.state)
    return memory.state


def empty_error_queue(conversation: Conversation, talk: SupplyTalk) -> None:
    """Empty the supply's error queue; the first entry is raised.

    Raises
    ------
    InstrumentError
        ``refused`` with that entry.
    """
    profile = talk.profile
    if not profile.questions.error:
        return
    none = {word.upper() for word in profile.answers.no_error}
    found: list[str] = []
    for _ in range(profile.error_limit):
        entry = ask_series(conversation, profile.questions.error, str.strip)
        if entry.upper() in none or entry.lstrip("+-0").startswith(",") or entry.lstrip("+-0") == "":
            break
        found.append(entry)
    if found:
        raise InstrumentError(
            "refused",
            f"The supply reports the error {visible(found[0])}",
            "none",
            "See the supply's manual for it",
        )


def _held(talk: SupplyTalk, state: SupplyState, outputs: tuple[bool, bool]) -> tuple[bool, bool]:
    """Judge from the measured current whether an output is held by its limit."""
    if state.limit_a is None:
        return (False, False)
    line_a = state.limit_a * (1.0 - _LIMIT_SHARE) - talk.profile.amps_tolerance_a
    amps = (state.positive_a, state.negative_a)
    held = [bool(on) and now is not None and abs(now) >= line_a for on, now in zip(outputs, amps, strict=True)]
    return (held[0], held[1])
