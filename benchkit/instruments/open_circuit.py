"""Switch a supply on for a moment, low and into open circuit, and off again whatever happens.

Rules
-----
* Limit, protection and voltages are set and read back with the outputs off; then both outputs are on at `TEST_V` with a
  limit of `TEST_A`, for `MOST_ON_S` at the most, counted from the moment at which the message "on" went out.
* Every way out ends with "off", read back: a reading that fails, Ctrl+C, a signal, a closed terminal, an error of our
  own.  A process that is killed outright can't do this; therefore the small voltage and the short time.
* Nothing is written to a screen while the supply is on.
"""

from __future__ import annotations

import time
from collections.abc import Sequence
from concurrent.futures import Future
from contextlib import suppress
from dataclasses import dataclass, field
from typing import TypeVar

from benchkit.errors import BenchkitError, InstrumentError
from benchkit.events import SupplyState
from benchkit.instruments.holding import HeldSignals
from benchkit.instruments.supply import UNKNOWN, OffOutcome, Supply
from benchkit.instruments.traffic import TrafficLog

T = TypeVar("T")

TEST_V = 1.0
"""What the supply is switched on to, V, each output."""

TEST_A = 0.01
"""Its current limit then, A."""

MOST_ON_S = 1.8
"""How long it is on at the most before "off" is sent, s."""

VOLTS_OFF_BY = 0.1
"""How far the voltage may read from `TEST_V`, V: our own choice, far more than a supply's error at so low a voltage."""

_RISE_S = 0.8
_SET_S = 30.0
_OFF_S = 12.0
_LOOK_S = 0.1


class OnNoticed(TrafficLog):
    """A log of what goes over the link that remembers when "on" went out.

    Parameters
    ----------
    messages : sequence of str
        How the supply is told to switch on; of a message with a place for an output the part before that counts.
    """

    def __init__(self, messages: Sequence[str]) -> None:
        super().__init__()
        self._beginnings = tuple(message.partition("{")[0].encode("ascii") for message in messages)
        self.armed = False
        self.on_s: float | None = None

    def note(self, label: str, what: str, data: bytes = b"", seconds: float | None = None) -> None:
        """Add one entry."""
        if self.armed and self.on_s is None and what == "sent" and any(one in data for one in self._beginnings):
            self.on_s = time.monotonic()
        super().note(label, what, data, seconds)


@dataclass
class Tried:
    """How it went.

    Attributes
    ----------
    off : OffOutcome
        How the switching off ended.
    powered : SupplyState or None
        With the outputs on.
    on_s : float
        From "on" until "off" was confirmed or given up, s; 0 when "on" was never sent.
    problems : list of str
        What did not go as it should.
    stopped : str
        The signal that ended it early; empty when none did.
    """

    off: OffOutcome
    powered: SupplyState | None = None
    on_s: float = 0.0
    problems: list[str] = field(default_factory=list)
    stopped: str = ""


def try_open_circuit(supply: Supply, log: OnNoticed) -> Tried:
    """Set low, read back, switch on, look, switch off; "off" whatever happens after the first message.

    Parameters
    ----------
    supply : Supply
        With its outputs off, and nothing connected.
    log : OnNoticed
        That of the supply's link.
    """
    tried = Tried(off=OffOutcome(confirmed=False, how=UNKNOWN, state=None))
    with HeldSignals() as held:
        try:
            _until(held, supply.set(TEST_V, -TEST_V, TEST_A, False), log)
            log.armed = True
            tried.powered = _until(held, supply.set(TEST_V, -TEST_V, TEST_A, True), log).state
            while judge_open_circuit(tried.powered) and _on_for_s(log) < _RISE_S:
                tried.powered = _until(held, supply.sample(), log).state
        except TimeoutError:
            tried.problems.append(
                f"The supply took more than {MOST_ON_S:g} s to come on and be read; it was cut short."
            )
        except BenchkitError as error:
            if not held.stopped:
                tried.problems.append(str(error))
        finally:
            tried.off = _off(supply)
            tried.on_s = _on_for_s(log)
        tried.stopped = held.stopped
    if not tried.off.confirmed:
        tried.problems.append(f"The supply did not confirm that it is off. {_sentence(tried.off.how)}")
    if tried.powered is not None:
        tried.problems += judge_open_circuit(tried.powered)
    return tried


def judge_open_circuit(state: SupplyState) -> list[str]:
    """Return what is wrong with a supply that is on at `TEST_V` with nothing connected."""
    problems = []
    for rail, volts, amps, in_limit in (
        ("positive", state.positive_v, state.positive_a, state.positive_in_limit),
        ("negative", state.negative_v, state.negative_a, state.negative_in_limit),
    ):
        wanted_v = TEST_V if rail == "positive" else -TEST_V
        if in_limit or (amps is not None and abs(amps) > TEST_A / 2.0):
            flows = "" if amps is None else f"; {abs(amps) * 1000.0:.1f} mA flow"
            held = "is held by its current limit" if in_limit else "is loaded"
            problems.append(
                f"The {rail} output {held}{flows}. Expected open circuit. Take off what is connected to it."
            )
        elif volts is None or abs(volts - wanted_v) > VOLTS_OFF_BY:
            reads = "nothing" if volts is None else f"{volts:.3f} V"
            problems.append(f"The {rail} output reads {reads}. Expected {wanted_v:g} V. Look at the supply's display.")
    return problems


def _on_for_s(log: OnNoticed) -> float:
    return 0.0 if log.on_s is None else time.monotonic() - log.on_s


def _until(held: HeldSignals, future: Future[T], log: OnNoticed) -> T:
    """Wait for an answer, but no longer than until a signal comes or the supply has been on for long enough."""
    end_s = time.monotonic() + _SET_S
    while not held.stopped:
        left_s = min(end_s - time.monotonic(), MOST_ON_S - _on_for_s(log))
        try:
            return future.result(max(0.0, min(left_s, _LOOK_S)))
        except TimeoutError:
            if future.done() or left_s <= 0:
                raise
    raise InstrumentError("refused", f"Stopped by {held.stopped}", "", "The supply is switched off")


def _off(supply: Supply) -> OffOutcome:
    """Switch off, and wait for what becomes of it; never raises."""
    with suppress(Exception):
        return supply.off().result(_OFF_S)
    return OffOutcome(confirmed=False, how=UNKNOWN, state=None)


def _sentence(text: str) -> str:
    text = text[:1].upper() + text[1:]
    return text if text.endswith((".", "!")) else text + "."
