"""What goes over the pipe between the screen and the keeper: one JSON object a line, ASCII.

To the keeper
    ``{"id": 7, "do": "append", ...}``: a request, answered once by ``{"id": 7, "ok": {...}}`` or
    ``{"id": 7, "error": {...}}``.  ``{"do": "beat", "n": 12}``: a heartbeat of the screen's event loop, answered by
    ``{"beat": 12}``.

From the keeper, unasked
    ``{"hello": {...}}`` first of all; ``{"push": {...}}``: an event that the keeper wrote into the journal itself;
    ``{"step": 7, ...}``: how far the ramp has come that was asked for by request 7.

Answers to ``append`` and pushes come from one thread in the order of the journal, so that everybody sees one order.
An error crosses as its class's name and its parts, and comes out as the same class.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from benchkit import errors
from benchkit.errors import BenchkitError

if TYPE_CHECKING:
    from benchkit.events import Event

HEARTBEAT_LIMIT_S = 1.0
"""So long may the armed keeper be without a heartbeat while the supply may be on, s."""

IDLE_HEARTBEAT_LIMIT_S = 15.0
"""So long while the supply is known to be off: then a machine that has far too much to do is only slow, s."""


@dataclass(frozen=True, kw_only=True)
class JournalHead:
    """Where a journal stands: the number of its last line, and the torn line that was cut off on resuming."""

    seq: int
    torn: str = ""


@dataclass(frozen=True, kw_only=True)
class Kept:
    """What became of an event that was to be kept.

    Parameters
    ----------
    seq : int
        Its number in the journal; with `moved_on` the number of the journal's last line.
    moved_on : bool
        It was *not* kept, because the keeper had written an event of its own in between: handle the pushed events up
        to `seq` first, then think again.
    """

    seq: int
    moved_on: bool = False


@dataclass(frozen=True, kw_only=True)
class WatchLines:
    """What the keeper watches the supply for.

    Parameters
    ----------
    positive_a, negative_a : float or None
        Rail currents above which it switches off, A.
    positive_v, negative_v : float or None
        Rail voltages above which it switches off, V; magnitudes, both positive.
    least_share : float or None
        The share of the voltage that is set, 0 to 1, below which a rail has broken down.
    trip_on_limit : bool
        A rail held by its current limit switches off too.
    grace_s : float
        For so long after the watch was set (charging capacitors) only an output that went off counts, s.
    own_interval_s : float or None
        How often the keeper looks by itself, s; None: only when asked to by `sample` (simulated time).
    age_limit_s : float or None
        So old may the last good reading of the meter get, s; None while nothing depends on the meter.
    """

    positive_a: float | None = None
    negative_a: float | None = None
    positive_v: float | None = None
    negative_v: float | None = None
    least_share: float | None = None
    trip_on_limit: bool = True
    grace_s: float = 0.0
    own_interval_s: float | None = None
    age_limit_s: float | None = None


@dataclass(frozen=True, kw_only=True)
class Push:
    """An event that the keeper brought about itself.

    Parameters
    ----------
    event : Event
        ``Tripped``, ``ContactLost`` or ``OutputOff``.
    seq : int or None
        Its number in the journal; None if it could not be kept, or none was open.
    problem : str
        Why it could not be kept; empty if it was, or if no journal was open.
    """

    event: Event
    seq: int | None
    problem: str = ""


@dataclass(frozen=True, kw_only=True)
class KeeperDied:
    """The keeper's process is gone, or had to be ended because it had stopped answering."""

    problem: str


def encode(message: Mapping[str, Any]) -> bytes:
    """Return a message as its line.

    Raises
    ------
    ValueError
        If it holds a number that is not finite.
    """
    return json.dumps(message, ensure_ascii=True, allow_nan=False, separators=(",", ":")).encode("ascii") + b"\n"


def decode(line: bytes) -> dict[str, Any]:
    """Return the message that a line holds.

    Raises
    ------
    ValueError
        If it holds none.
    """
    message = json.loads(line)
    if not isinstance(message, dict):
        raise ValueError(f"{line[:80]!r} is no message")
    return message


def error_to_wire(error: BaseException) -> dict[str, Any]:
    """Return an error as plain JSON; one of our own programming becomes a `BenchkitError` in words."""
    if not isinstance(error, BenchkitError):
        error = BenchkitError(f"The keeper failed: {type(error).__name__}: {error}", "", "Please report this")
    parts = {
        name: value.decode("latin-1") if isinstance(value, bytes) else value for name, value in vars(error).items()
    }
    return {"kind": type(error).__name__, "parts": parts}


def error_from_wire(wire: Mapping[str, Any]) -> BenchkitError:
    """Return the error that `error_to_wire` was given."""
    kind = getattr(errors, str(wire.get("kind")), BenchkitError)
    if not (isinstance(kind, type) and issubclass(kind, BenchkitError)):
        kind = BenchkitError
    parts = dict(wire.get("parts", {}))
    if "partial" in parts:
        parts["partial"] = str(parts["partial"]).encode("latin-1", "replace")
    error = kind.__new__(kind)
    error.__dict__.update(parts)
    Exception.__init__(error, error.message)
    return error
