"""A peer in simulated time whose answers come late, twice or never, in the order of its questions.

What it promises is what every instrument does: it answers in the order in which it was asked.  All else is drawn.
"""

from __future__ import annotations

import re
import threading
from collections import deque
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field

import pytest

from benchkit.instruments import conversation, lines
from benchkit.instruments.address import Address, parse_address
from benchkit.instruments.conversation import Conversation, LinkSettings
from benchkit.instruments.traffic import TrafficLog
from benchkit.instruments.transports import Piece

NAME = "Own,Simulated Peer,P-1,1.0"


class Clock:
    """Simulated time, in place of the module `time`."""

    def __init__(self) -> None:
        self.now_s = 0.0

    def monotonic(self) -> float:
        return self.now_s

    def sleep(self, seconds: float) -> None:
        self.now_s += seconds


@dataclass(frozen=True)
class Fate:
    """What becomes of one answer: how late it is, how often it comes, how long after each other; or a cancel."""

    late_s: float = 0.0
    copies: int = 1
    gap_s: float = 0.0
    cancel: bool = False


@dataclass
class Peer:
    """The instrument; `fates` are used up one answer after the other, then all is well."""

    shared_wire: bool = False
    knows_sync: bool = True
    fates: deque[Fate] = field(default_factory=deque)
    clock: Clock = field(default_factory=Clock)
    cancel: threading.Event = field(default_factory=threading.Event)
    wire: deque[tuple[float, bytes]] = field(default_factory=deque)
    told: list[str] = field(default_factory=list)
    openings: int = 0
    register: int = 0

    def connect(self, address: Address, settings: LinkSettings) -> PeerTransport:
        self.openings += 1
        return PeerTransport(self, self.wire if self.shared_wire else deque())

    def hear(self, message: str, out: deque[tuple[float, bytes]]) -> None:
        self.told.append(message)
        for unit in message.split(";"):
            if (answer := self._answer(unit)) is not None:
                fate = self.fates.popleft() if self.fates else Fate()
                if fate.cancel:
                    self.cancel.set()
                begin_s = max(self.clock.now_s + fate.late_s, out[-1][0] if out else 0.0)
                out.extend((begin_s + copy * fate.gap_s, answer.encode() + b"\n") for copy in range(fate.copies))

    def _answer(self, unit: str) -> str | None:
        if unit == "*IDN?":
            return NAME
        if unit == "*ESE?":
            return str(self.register) if self.knows_sync else None
        if match := re.fullmatch(r"\*ESE ([0-9]+)", unit):
            self.register = int(match[1])
        elif match := re.fullmatch(r"ECHO\? ([0-9]+)", unit):
            return f"{int(match[1]):+.6E}"
        return None


class PeerTransport:
    """One link to the peer."""

    def __init__(self, peer: Peer, out: deque[tuple[float, bytes]]) -> None:
        self._peer = peer
        self._out = out
        self.fresh_when_reopened = not peer.shared_wire

    def write(self, data: bytes) -> None:
        self._peer.hear(data.decode().removesuffix("\n"), self._out)

    def read_piece(self, wait_s: float, left_s: float) -> Piece:
        clock = self._peer.clock
        if self._out and self._out[0][0] <= clock.now_s + wait_s:
            at_s, data = self._out.popleft()
            clock.now_s = max(clock.now_s, at_s)
            return Piece(data, False)
        clock.now_s += max(wait_s, 1e-4)
        return Piece(b"", False)

    def pending(self) -> bool:
        return bool(self._out) and self._out[0][0] <= self._peer.clock.now_s

    def peer_closed(self) -> bool:
        return False

    def drain(self, quiet_s: float) -> bytes:
        thrown = b""
        while (piece := self.read_piece(quiet_s, quiet_s)).data:
            thrown += piece.data
        return thrown

    def reset(self) -> None:
        pass

    def close(self) -> None:
        pass


@contextmanager
def simulated(peer: Peer, settings: LinkSettings) -> Iterator[Conversation]:
    """Talk with the peer in its time."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(conversation, "time", peer.clock)
        patch.setattr(lines, "time", peer.clock)
        yield Conversation(
            "the peer",
            parse_address("TCPIP::peer::1::SOCKET"),
            settings,
            TrafficLog(),
            peer.cancel,
            opener=peer.connect,
        )
