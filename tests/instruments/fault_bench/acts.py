"""What an instrument does with a message: acts, played one after the other on whatever link it has."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from threading import Event
from typing import Protocol


@dataclass(frozen=True)
class Say:
    """Send bytes; `end` marks the end of a message on links that have such a mark (VXI-11, HiSLIP)."""

    data: bytes
    end: bool = True


@dataclass(frozen=True)
class Wait:
    """Do nothing for so long, s."""

    seconds: float


@dataclass(frozen=True)
class Close:
    """Break the link in an orderly way, in the middle of a reply if `half` isn't empty."""

    half: bytes = b""


@dataclass(frozen=True)
class Reset:
    """Break the link with a TCP reset."""


@dataclass(frozen=True)
class Do:
    """Call something, for instance the server's own `stop`."""

    what: Callable[[], None]


Act = Say | Wait | Close | Reset | Do


class Outlet(Protocol):
    """One open link, seen from the instrument."""

    gone: Event

    def say(self, data: bytes, end: bool) -> None:
        """Send bytes; OSError when nobody is there any more."""

    def close(self, half: bytes) -> None:
        """Break the link."""

    def reset(self) -> None:
        """Break the link hard."""


def play(acts: Sequence[Act], outlet: Outlet) -> None:
    """Play acts on a link; ends early when the link is gone."""
    for act in acts:
        if outlet.gone.is_set():
            return
        match act:
            case Say(data, end):
                outlet.say(data, end)
            case Wait(seconds):
                outlet.gone.wait(seconds)
            case Close(half):
                outlet.close(half)
            case Reset():
                outlet.reset()
            case Do(what):
                what()


def bytewise(data: bytes, pause_s: float = 0.0) -> tuple[Act, ...]:
    """Return acts that send a reply byte by byte, the mark of its end on the last."""
    acts: list[Act] = []
    for place, byte in enumerate(data):
        acts.append(Say(bytes([byte]), end=place == len(data) - 1))
        if pause_s and place < len(data) - 1:
            acts.append(Wait(pause_s))
    return tuple(acts)


def halves(data: bytes, place: int, pause_s: float) -> tuple[Act, ...]:
    """Return acts that send a reply in two parts with a pause between."""
    return (Say(data[:place], end=False), Wait(pause_s), Say(data[place:]))
