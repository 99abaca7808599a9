"""What a conversation needs of a transport."""

from __future__ import annotations

from typing import NamedTuple, Protocol

SLICE_S = 0.05
"""How long one slice of waiting lasts, s: so long a cancelled question goes on at most."""


class Piece(NamedTuple):
    """What one slice brought: bytes, and whether the transport itself says that a message ends with them."""

    data: bytes
    ended: bool


class Transport(Protocol):
    """An open link.  Only its owner thread may call it."""

    @property
    def fresh_when_reopened(self) -> bool:
        """True when nothing that was said to an earlier link can arrive at a new one."""

    def write(self, data: bytes) -> None:
        """Send bytes as they are."""

    def read_piece(self, wait_s: float, left_s: float) -> Piece:
        """Wait for at most `wait_s` and return what came, up to and with the terminator; may be empty.

        Parameters
        ----------
        wait_s : float
            This slice, s.
        left_s : float
            What is left until the caller gives up, s; for transports that can't be asked twice.
        """

    def pending(self) -> bool:
        """Tell whether unasked bytes wait, as far as the transport can see."""

    def peer_closed(self) -> bool:
        """Tell whether the other side is gone, as far as the transport can see."""

    def drain(self, quiet_s: float) -> bytes:
        """Throw away what has come, until nothing comes for `quiet_s`; return the first of it for the log."""

    def reset(self) -> None:
        """Empty the instrument's own buffers, where the link can; never raises."""

    def close(self) -> None:
        """Close; safe to call twice, never raises, never waits for the instrument."""
