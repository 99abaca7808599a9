"""The simulated dual supply: its SCPI headers, and how well it sets and reads back.

Channel 1 is the positive rail, channel 2 the negative one; both are programmed and read in magnitudes.  Each channel
is stiff up to its current limit and then a constant current (`benchkit.rehearsal.rails`); while the limit holds it,
bit 0 of its questionable condition is set.  Every setting of one message takes effect together, because no simulated
time passes inside a message.

Each channel protects what hangs on it (`benchkit.rehearsal.protection`): the over-voltage level is compared with the
voltage at the terminals, the over-current protection with the limit.  A channel that has tripped stays off until it is
cleared; to switch it on before that is a conflict of settings, and nothing of that unit of the message happens.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Final, Protocol

import numpy as np

from benchkit.rehearsal.protection import MOST_DELAY_S, Protection
from benchkit.rehearsal.scpi import Arguments, Instrument, ScpiError, nr3

MOST_VOLTS: Final = 100.0
MOST_LEVEL_V: Final = 110.0
MOST_AMPS: Final = 10.0

SET_VOLTS: Final = (0.0005, 0.005)
SET_AMPS: Final = (0.0005, 0.0005)
READ_VOLTS: Final = (0.0005, 0.003)
READ_AMPS: Final = (0.0005, 0.0003)
"""Half-widths of setting and reading back: share of the value, and volts or amperes (our own figures)."""

_RESET_LIMIT_A = 0.1
VOLT_STEP = 0.001
AMP_STEP = 0.0001


@dataclass
class Terminals:
    """The true state of one channel's terminals.

    Parameters
    ----------
    volts, amps : float
        Magnitude of the voltage, and the current delivered.
    in_limit : bool
        The current limit holds the channel, not its voltage.
    """

    volts: float = 0.0
    amps: float = 0.0
    in_limit: bool = False


class Powered(Protocol):
    """What the supply's leads end at."""

    def program(self, channel: int, volts: float, limit_a: float, on: bool) -> None:
        """Take over what channel 1 or 2 truly delivers from now on."""
        ...

    def terminals(self, channel: int) -> Terminals:
        """Return the true state of channel 1 or 2."""
        ...


@dataclass
class _Channel:
    """Settings of a channel, and its drawn errors as (gain, offset)."""

    volts: float
    limit_a: float
    on: bool
    set_volts: tuple[float, float]
    set_amps: tuple[float, float]
    read_volts: tuple[float, float]
    read_amps: tuple[float, float]


class Supply(Instrument):
    """The supply.

    Parameters
    ----------
    powered : Powered
        Where its leads end.
    rng : numpy.random.Generator
        For its errors (drawn now) and its noise (drawn at each reading back).
    """

    def __init__(self, powered: Powered, rng: np.random.Generator) -> None:
        super().__init__("Rehearsal,Two Rails,RB-S-0001,1.0")
        self._powered = powered
        self._rng = rng

        def drawn(half_widths: tuple[float, float]) -> tuple[float, float]:
            gain, offset = rng.uniform(-0.8, 0.8, 2)
            return float(gain * half_widths[0]), float(offset * half_widths[1])

        self._protections = {number: Protection(MOST_LEVEL_V) for number in (1, 2)}
        self._channels = {
            number: _Channel(
                0.0, _RESET_LIMIT_A, False, drawn(SET_VOLTS), drawn(SET_AMPS), drawn(READ_VOLTS), drawn(READ_AMPS)
            )
            for number in (1, 2)
        }
        self.reset()
        level = "[:LEVel][:IMMediate][:AMPLitude]"
        self.on(f"[SOURce]:VOLTage{level}", self._set_volts)
        self.on(f"[SOURce]:CURRent{level}", self._set_limit)
        self.on(f"[SOURce]:VOLTage{level}?", self._each(lambda channel, _: nr3(channel.volts)))
        self.on(f"[SOURce]:CURRent{level}?", self._each(lambda channel, _: nr3(channel.limit_a)))
        self.on("OUTPut[:STATe]", self._switch)
        self.on("OUTPut[:STATe]?", self._each(lambda channel, _: "1" if channel.on else "0"))
        self.on("MEASure[:SCALar]:VOLTage[:DC]?", self._each(self._measure_volts))
        self.on("MEASure[:SCALar]:CURRent[:DC]?", self._each(self._measure_amps))
        self.on("STATus:QUEStionable:CONDition?", self._each(self._condition))
        guard = self._protections
        self.on("[SOURce]:VOLTage:PROTection[:LEVel]", self._set_level)
        self.on("[SOURce]:VOLTage:PROTection[:LEVel]?", self._each(lambda _, number: nr3(guard[number].level_v)))
        self.on("[SOURce]:VOLTage:PROTection:TRIPped?", self._tripped("over-voltage"))
        self.on("[SOURce]:CURRent:PROTection:STATe", self._set_current_protection)
        self.on("[SOURce]:CURRent:PROTection:STATe?", self._each(lambda _, number: str(int(guard[number].current_on))))
        self.on("[SOURce]:CURRent:PROTection:DELay", self._set_delay)
        self.on("[SOURce]:CURRent:PROTection:DELay?", self._each(lambda _, number: nr3(guard[number].delay_s)))
        self.on("[SOURce]:CURRent:PROTection:TRIPped?", self._tripped("over-current"))
        self.on("OUTPut:PROTection:CLEar", self._clear_protection)

    def reset(self) -> None:
        """Go to output off, 0 V, 0.1 A on both channels, nothing tripped and no protection below its most."""
        self._protections.update({number: Protection(MOST_LEVEL_V) for number in self._protections})
        for number, channel in self._channels.items():
            channel.volts, channel.limit_a, channel.on = 0.0, _RESET_LIMIT_A, False
            self._apply(number)

    def _apply(self, number: int) -> None:
        channel = self._channels[number]
        volts = channel.volts * (1.0 + channel.set_volts[0]) + channel.set_volts[1] if channel.volts > 0.0 else 0.0
        limit_a = channel.limit_a * (1.0 + channel.set_amps[0]) + channel.set_amps[1] if channel.limit_a > 0.0 else 0.0
        self._powered.program(number, max(volts, 0.0), max(limit_a, 0.0), channel.on)
        self._look(number, 0.0)

    def patience_s(self) -> float:
        """Return how long (s) the outputs may go unseen before a protection acts."""
        waits = [self._protections[number].patience_s() for number, channel in self._channels.items() if channel.on]
        return min(waits, default=math.inf)

    def mind(self, seconds: float) -> None:
        """Let the protections look at the terminals after some time."""
        for number in self._channels:
            self._look(number, seconds)

    def _look(self, number: int, seconds: float) -> None:
        channel, protection = self._channels[number], self._protections[number]
        if not channel.on:
            protection.held_s = 0.0
            return
        if protection.level_v >= MOST_LEVEL_V and not protection.current_on:
            return  # nothing that the supply can deliver reaches it
        now = self._powered.terminals(number)
        if protection.look(now.volts, now.in_limit, seconds):
            channel.on = False
            self._apply(number)

    def _set_level(self, arguments: Arguments) -> None:
        level_v = arguments.number("V", 0.0, MOST_LEVEL_V)
        for number in _only_channels(arguments):
            self._protections[number].level_v = round(level_v / VOLT_STEP) * VOLT_STEP
            self._look(number, 0.0)

    def _set_current_protection(self, arguments: Arguments) -> None:
        on = arguments.boolean()
        for number in _only_channels(arguments):
            self._protections[number].current_on = on
            self._protections[number].held_s = 0.0

    def _set_delay(self, arguments: Arguments) -> None:
        delay_s = arguments.number("S", 0.0, MOST_DELAY_S)
        for number in _only_channels(arguments):
            self._protections[number].delay_s = delay_s

    def _tripped(self, what: str) -> Callable[[Arguments], str]:
        return self._each(lambda _, number: str(int(self._protections[number].tripped == what)))

    def clear_protection(self) -> None:
        """Forget what has tripped, as at the supply's own keys."""
        for protection in self._protections.values():
            protection.clear()

    def _clear_protection(self, arguments: Arguments) -> None:
        for number in _only_channels(arguments):
            self._protections[number].clear()

    def _set_volts(self, arguments: Arguments) -> None:
        volts = arguments.number("V", 0.0, MOST_VOLTS)
        for number in _only_channels(arguments):
            self._channels[number].volts = round(volts / VOLT_STEP) * VOLT_STEP
            self._apply(number)

    def _set_limit(self, arguments: Arguments) -> None:
        limit_a = arguments.number("A", 0.0, MOST_AMPS)
        for number in _only_channels(arguments):
            self._channels[number].limit_a = round(limit_a / AMP_STEP) * AMP_STEP
            self._apply(number)

    def _switch(self, arguments: Arguments) -> None:
        on = arguments.boolean()
        numbers = _only_channels(arguments)
        if on and any(self._protections[number].tripped for number in numbers):
            raise ScpiError(-221)
        for number in numbers:
            self._channels[number].on = on
            self._apply(number)

    def _each(self, answer: Callable[[_Channel, int], str]) -> Callable[[Arguments], str]:
        def handler(arguments: Arguments) -> str:
            return ",".join(answer(self._channels[number], number) for number in _only_channels(arguments))

        return handler

    def _measure_volts(self, channel: _Channel, number: int) -> str:
        return nr3(self._read(self._powered.terminals(number).volts, channel.read_volts, VOLT_STEP))

    def _measure_amps(self, channel: _Channel, number: int) -> str:
        return nr3(self._read(self._powered.terminals(number).amps, channel.read_amps, AMP_STEP))

    def _read(self, value: float, error: tuple[float, float], step: float) -> float:
        noise = 0.3 * step * float(self._rng.standard_normal())
        return round((value * (1.0 + error[0]) + error[1] + noise) / step) * step

    def _condition(self, channel: _Channel, number: int) -> str:
        return "1" if channel.on and self._powered.terminals(number).in_limit else "0"


def _only_channels(arguments: Arguments) -> tuple[int, ...]:
    channels = arguments.channels(2)
    arguments.end()
    return channels
