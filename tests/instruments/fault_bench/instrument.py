"""The instruments of the fault bench: what they answer, what they heard, and which message goes wrong how."""

from __future__ import annotations

import re
import threading
import time
from collections.abc import Callable, Sequence

from tests.instruments.fault_bench.acts import Act, Say
from tests.instruments.server import Scpi, TwoOutputs

Plan = Callable[[str], Sequence[Act] | None]


class FaultInstrument(Scpi):
    """An instrument whose `plan`, when it returns acts for a message, is played instead of the answer.

    Parameters
    ----------
    name : str
        The answer to ``*IDN?``.
    """

    def __init__(self, name: str) -> None:
        Scpi.__init__(self, name)
        self._equip()

    def _equip(self) -> None:
        self.plan: Plan | None = None
        self.ending = b"\n"
        self.lock = threading.RLock()
        self.heard: list[tuple[float, str]] = []

    def acts(self, message: str) -> Sequence[Act]:
        """Note a message and return what is done with it."""
        with self.lock:
            self.heard.append((time.monotonic(), message))
            planned = self.plan(message) if self.plan is not None else None
            if planned is not None:
                return planned
            reply = self.reply(message)
        return () if reply is None else (Say(reply.encode("latin-1") + self.ending),)

    def messages(self) -> list[str]:
        """Return everything that was heard, in its order."""
        with self.lock:
            return [message for _, message in self.heard]

    def heard_at(self, message: str) -> float:
        """Return when a message was last heard, on the monotonic clock."""
        with self.lock:
            return next(at for at, heard in reversed(self.heard) if heard == message)

    def fails_once(self, begins: str, *acts: Act) -> None:
        """Play acts for the next message that begins so, and answer every other."""
        left = [acts]

        def plan(message: str) -> Sequence[Act] | None:
            return left.pop() if left and message.startswith(begins) else None

        self.plan = plan

    def fails_always(self, begins: str, *acts: Act) -> None:
        """Play acts for each message that begins so."""
        self.plan = lambda message: acts if message.startswith(begins) else None


class FaultMeter(FaultInstrument):
    """A meter that reads the number it was asked for: ``MEAS:VOLT:DC? 17`` is answered by 17.

    So an answer proves which question it belongs to.  Without a number it reads `reading`.
    """

    def __init__(self, name: str = "Own,Fault Meter,FM-1,1.0") -> None:
        super().__init__(name)
        self.reading = 0.0123

    def answer(self, message: str) -> str | None:
        match = re.fullmatch(r"MEAS:[A-Z:]+\?(?: ([-+.0-9eE]+))?", message)
        if match is None:
            return super().answer(message)
        return f"{float(match[1]) if match[1] else self.reading:+.8E}"


class FaultSupply(TwoOutputs, FaultInstrument):
    """Two outputs into two resistors, on any link."""

    def __init__(self, name: str = "Own,Fault Supply,FS-1,1.0", load_ohm: float = 1000.0) -> None:
        TwoOutputs.__init__(self, name, load_ohm)
        self._equip()
