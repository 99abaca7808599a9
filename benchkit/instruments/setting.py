"""Setting a supply: each thing in its order, read back before the next.

Rules
-----
* The order: output off if it shall be off; the limit; over-voltage protection; both voltages; on.  The voltage is never
  raised before limit and protection have been seen in the supply itself.  A voltage that falls goes before the
  protection, which it would else trip; and protection stays above what capacitors still hold at the terminals.
* Both voltages go into one message where the supply takes that.  Where each output is switched on by a message of its
  own, that happens at 0 V, so that no rail stands alone.
* Over-current protection is off while voltages rise, when capacitors draw what they like, and on once the outputs are
  on and not in their limit: then it holds when nobody looks.
* Nothing is sent a second time.  When the link had to be opened anew or put in order, nothing more is set.
"""

from __future__ import annotations

import time
from collections.abc import Mapping
from dataclasses import dataclass, replace

from benchkit.errors import InstrumentError
from benchkit.events import SupplyState
from benchkit.instruments.conversation import Conversation
from benchkit.instruments.dialect import SupplyTalk
from benchkit.instruments.reading_supply import Sample, empty_error_queue, read_sample
from benchkit.instruments.switching_off import Memory, state_of

Words = Mapping[str, str]

_ABOVE_SHARE, _ABOVE_V = 1.05, 0.5
"""How far protection stays above a voltage that capacitors hold (our own figures)."""

_MEASURED_SHARE, _MEASURED_V = 0.05, 0.5
"""How far a measured voltage may be from one that can't be read back (our own figures)."""


@dataclass(frozen=True, kw_only=True)
class Wanted:
    """What is to be set: voltages and protection as the supply writes them, positive rail first."""

    volts: tuple[float, float]
    limit_a: float
    on: bool
    protection_v: tuple[float, float]
    over_current: bool


class Setter:
    """One act of setting, over one opening of the link.

    Parameters
    ----------
    conversation : Conversation
    talk : SupplyTalk
    memory : Memory

    Attributes
    ----------
    astray : bool
        The link was opened anew under a message: it may have reached another output than it was meant for.
    """

    def __init__(self, conversation: Conversation, talk: SupplyTalk, memory: Memory) -> None:
        self.astray = False
        self._conversation = conversation
        self._openings = conversation.openings
        self._talk = talk
        self._profile = talk.profile
        self._memory = memory
        self._sign = -1.0 if talk.profile.negative_programmed_positive else 1.0

    def carry_out(self, wanted: Wanted, was_on: bool) -> Sample:
        """Set everything and return what was read back at the end.

        Raises
        ------
        InstrumentError
            ``refused`` when something was not taken; any other kind from the link.
        """
        commands, protected = self._profile.commands, self._profile.has_over_voltage
        if not wanted.on and was_on:
            self._tell(commands.off)
            self._told(False)
        present = self._present_volts(was_on)
        self._set_limit(wanted.limit_a, present)
        rises = any(abs(new) > abs(old) for new, old in zip(wanted.volts, present, strict=True))
        comes_on = wanted.on and not was_on
        if rises or comes_on or not wanted.over_current:
            self._over_current(False)
        lowered = False
        if protected:
            fallen = [new if abs(new) < abs(old) else old for new, old in zip(wanted.volts, present, strict=True)]
            if tuple(fallen) != present:
                present, lowered = (fallen[0], fallen[1]), True
                self.set_volts(present, wanted.limit_a)
            self._protect(wanted.protection_v)
        if comes_on and any("{output}" in message for message in commands.on) and any(wanted.volts):
            self.set_volts((0.0, 0.0), wanted.limit_a)
            self._switch_on()
            self.set_volts(wanted.volts, wanted.limit_a)
        else:
            if not lowered or wanted.volts != present:
                self.set_volts(wanted.volts, wanted.limit_a)
            if comes_on:
                self._switch_on()
        if comes_on and self._profile.settle_s:
            time.sleep(self._profile.settle_s)
        empty_error_queue(self._conversation, self._talk)
        sample = read_sample(self._conversation, self._talk, self._memory)
        if wanted.on and all(sample.outputs):
            self._as_measured(sample.state, wanted)
            if wanted.over_current and not sample.state.in_limit:
                self._over_current(True)
        if self._conversation.openings != self._openings:
            raise put_in_order("its state was read")
        return sample

    def clear_protection(self) -> Sample:
        """Take both voltages to 0 V, clear the trips, and look.

        Raises
        ------
        InstrumentError
            ``refused`` when a trip stands or an output came on.
        """
        self.set_volts((0.0, 0.0), self._known_limit())
        self._tell(self._profile.commands.clear_protection)
        empty_error_queue(self._conversation, self._talk)
        sample = read_sample(self._conversation, self._talk, self._memory)
        if sample.state.tripped or any(sample.outputs):
            raise InstrumentError(
                "refused",
                "The supply's protection is still tripped" if sample.state.tripped else "An output came on by itself",
                "a protection that is ready and outputs that are off",
                "Switch the supply off by hand and look at its display",
            )
        return sample

    def set_volts(self, volts: tuple[float, float], limit_a: float) -> None:
        """Send both voltages and read them back."""
        commands, amps = self._profile.commands, self._figure(limit_a)
        given = [{"value": text, "volts": text, "amps": amps} for text in map(self._figure, volts)]
        self._tell_both(
            (commands.volts or commands.positive_volts, commands.volts or commands.negative_volts), (given[0], given[1])
        )
        self._memory.state = replace(
            self._memory.state, set_positive_v=volts[0], set_negative_v=self._sign * volts[1] + 0.0
        )
        self._demand("set_volts", volts, self._profile.volts_tolerance_v, "V")

    def _known_limit(self) -> float:
        if self._talk.has("limits"):
            return float(max(self._talk.ask(self._conversation, "limits")))
        return self._memory.state.limit_a or 0.0

    def _present_volts(self, was_on: bool) -> tuple[float, float]:
        """Return the voltages that are set now, as the supply writes them; those sent last if it doesn't say."""
        joint = any("{volts}" in message for message in self._profile.commands.limit)
        if not (self._profile.has_over_voltage or self._profile.commands.over_current_off or joint):
            return (0.0, 0.0)
        if self._talk.has("set_volts"):
            pair = self._talk.ask(self._conversation, "set_volts")
            return (float(pair[0]), float(pair[1]))
        state = self._memory.state
        if not was_on or state.set_positive_v is None or state.set_negative_v is None:
            return (0.0, 0.0)
        return (state.set_positive_v, self._sign * state.set_negative_v)

    def _set_limit(self, limit_a: float, present: tuple[float, float]) -> None:
        amps = self._figure(limit_a)
        given = [{"value": amps, "amps": amps, "volts": self._figure(volts)} for volts in present]
        self._tell(self._profile.commands.limit, (given[0], given[1]))
        self._memory.state = replace(self._memory.state, limit_a=limit_a)
        self._demand("limits", (limit_a, limit_a), self._profile.amps_tolerance_a, "A")

    def _protect(self, levels: tuple[float, float]) -> None:
        """Set over-voltage protection unless it stands there already."""
        tolerance_v = self._profile.over_voltage_tolerance_v
        now = self._talk.ask(self._conversation, "over_voltage")
        self._memory.state = state_of(self._talk, {"over_voltage": now}, self._memory.state)
        levels = self._above_terminals(levels, (abs(now[0]), abs(now[1])))
        wanted = (levels[0], -self._sign * levels[1])
        if all(abs(a - b) <= tolerance_v for a, b in zip(now, wanted, strict=True)):
            return
        commands = self._profile.commands
        halves = (
            commands.over_voltage or commands.over_voltage_positive,
            commands.over_voltage or commands.over_voltage_negative,
        )
        given = [{"value": self._figure(level)} for level in wanted]
        self._tell_both(halves, (given[0], given[1]))
        self._memory.state = replace(self._memory.state, protection_positive_v=None, protection_negative_v=None)
        got = self._demand("over_voltage", wanted, tolerance_v, "V")
        self._memory.state = state_of(self._talk, {"over_voltage": got}, self._memory.state)

    def _above_terminals(self, levels: tuple[float, float], now: tuple[float, float]) -> tuple[float, float]:
        """Return levels that charged capacitors don't trip: none is lowered below what stands at the terminals."""
        if all(level >= old for level, old in zip(levels, now, strict=True)):
            return levels
        volts = self._talk.ask(self._conversation, "volts")
        kept = [
            level if level >= old else min(old, max(level, _ABOVE_SHARE * abs(measured) + _ABOVE_V))
            for level, old, measured in zip(levels, now, volts, strict=True)
        ]
        return (kept[0], kept[1])

    def _over_current(self, on: bool) -> None:
        """Switch over-current protection, if the supply has it and it isn't so already."""
        commands, talk = self._profile.commands, self._talk
        if not commands.over_current_on:
            return
        now = self._memory.over_current if self._memory.over_current_openings == self._openings else None
        if talk.has("over_current"):
            pair = talk.ask(self._conversation, "over_current")
            now = pair[0] if pair[0] == pair[1] else None
        if now == on:
            return
        self._memory.over_current = None
        self._tell(commands.over_current_on if on else commands.over_current_off)
        empty_error_queue(self._conversation, talk)
        if talk.has("over_current") and talk.ask(self._conversation, "over_current") != (on, on):
            raise InstrumentError(
                "refused",
                "The supply's over-current protection did not change",
                f"both {'on' if on else 'off'}",
                "Look at the supply's own display",
            )
        self._memory.over_current, self._memory.over_current_openings = on, self._openings

    def _switch_on(self) -> None:
        self._told(True)
        self._tell(self._profile.commands.on)

    def _told(self, on: bool) -> None:
        self._memory.told, self._memory.told_openings = (on, on), self._conversation.openings

    def _tell_both(self, halves: tuple[tuple[str, ...], tuple[str, ...]], given: tuple[Words, Words]) -> None:
        """Send a message for each rail, as one where the supply takes that."""
        each = self._talk.halves(halves, given)
        joiner = self._profile.commands.joiner
        if joiner and all(len(messages) == 1 for messages in each):
            self._send([joiner.join(messages[0] for messages in each)])
        else:
            self._send([message for messages in each for message in messages])

    def _tell(self, series: tuple[str, ...], given: tuple[Words, Words] = ({}, {})) -> None:
        self._send(self._talk.commands(series, given))

    def _send(self, messages: list[str]) -> None:
        for message in messages:
            if self._conversation.openings != self._openings or self._conversation.dirty:
                raise put_in_order(message)
            self._conversation.tell(message)
            if self._conversation.openings != self._openings:
                self.astray = True
                raise put_in_order(message)

    def _figure(self, value: float) -> str:
        return f"{value + 0.0:.{self._profile.decimals}f}"

    def _demand(self, key: str, wanted: tuple[float, float], tolerance: float, unit: str) -> tuple[float, float]:
        """Read a setting back and compare; what was wanted if the supply doesn't read it back."""
        if not self._talk.has(key):
            return wanted
        got = self._talk.ask(self._conversation, key)
        if any(abs(a - b) > tolerance for a, b in zip(got, wanted, strict=True)):
            empty_error_queue(self._conversation, self._talk)
            question = self._talk.questions[key].series[-1]
            raise InstrumentError(
                "refused",
                f"The supply answers {question} with {got[0]:g} {unit} and {got[1]:g} {unit}",
                f"{wanted[0]:g} {unit} and {wanted[1]:g} {unit}, as sent",
                "Check what the supply can deliver and whether it is under remote control",
            )
        return (float(got[0]), float(got[1]))

    def _as_measured(self, state: SupplyState, wanted: Wanted) -> None:
        """Compare what is measured with what was set, where the supply doesn't read its settings back."""
        if self._talk.has("set_volts"):
            return
        for volts, target, held in (
            (state.positive_v, wanted.volts[0], state.positive_in_limit),
            (state.negative_v, wanted.volts[1], state.negative_in_limit),
        ):
            if not held and abs(abs(volts or 0.0) - abs(target)) > _MEASURED_SHARE * abs(target) + _MEASURED_V:
                raise InstrumentError(
                    "refused",
                    f"The supply measures {volts or 0.0:.2f} V where {abs(target):.2f} V were set",
                    "the voltage that was set, or the limit in the way",
                    "Look at the supply's own display",
                )


def put_in_order(before: str) -> InstrumentError:
    """Return the error for a link that changed under a setting."""
    return InstrumentError(
        "link lost",
        f"The link to the supply had to be put in order before {before}",
        "",
        "Nothing more was set; read the supply's state and decide again",
    )
