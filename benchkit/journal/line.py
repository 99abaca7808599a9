r"""One line of a journal: its bytes, its digest, and how both are checked.

The form of a line
------------------
A line is one JSON object in UTF-8, followed by one line feed (byte 0x0A).  Inside the object there is no line feed,
because JSON writes one inside a text as ``\n``.  Its members are exactly these, once each and in this order::

    {"seq":7,"at":"2031-04-05T06:07:08.123456Z","monotonic_s":81.25,"event":"noted","payload":{...},
     "prev":"<64 hex digits>","digest":"<64 hex digits>"}

(shown on two lines here; a line has no break).  The digest rule, so that any other program can check a record:

1.  Take the line's bytes without the line feed.  They end in ``,"digest":"``, 64 lower-case hexadecimal digits, and
    ``"}``: 77 bytes in all.
2.  Put the single byte ``}`` in the place of those 77 bytes.
3.  The SHA-256 of what you have is the digest; ``prev`` is the digest of the line before, or 64 zeros in the first.

The digest covers exact bytes: another spacing, another order or another spelling of the same JSON is another line.
``seq`` counts from 1.  ``at`` is UTC.  No number is NaN or infinite, no object holds a name twice.

The chain finds every accident and every careless edit.  It is no signature: who can write the whole file can make a
new chain.
"""

from __future__ import annotations

import hashlib
import json
import math
import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, NoReturn

from benchkit.errors import BenchkitError

FIRST_PREV = "0" * 64
"""What stands as ``prev`` in the first line."""

MEMBERS = ("seq", "at", "monotonic_s", "event", "payload", "prev", "digest")
"""The members of a line, in their order."""

TAIL = re.compile(rb',"digest":"([0-9a-f]{64})"\}')
"""How a line ends, without its line feed."""

_TAIL_LENGTH = 77
_AT = re.compile(r"\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d(?:\.\d+)?Z\Z")


@dataclass(frozen=True, kw_only=True)
class Line:
    """One line of a journal that has been checked by itself (its place in the chain is the reader's to check).

    Parameters
    ----------
    seq : int
        Its number, from 1.
    at : str
        When, UTC, ISO 8601, ending in ``Z``.
    monotonic_s : float
        The writer's steady clock, s.
    event : str
        The event's name.
    payload : dict
        The event's fields as plain JSON.
    prev, digest : str
        64 hexadecimal digits each.
    raw : bytes
        The exact bytes, line feed included.
    """

    seq: int
    at: str
    monotonic_s: float
    event: str
    payload: dict[str, Any]
    prev: str
    digest: str
    raw: bytes = field(repr=False)


def make_line(
    seq: int, at_iso: str, monotonic_s: float, event_name: str, payload: Mapping[str, Any], *, prev: str
) -> Line:
    """Return the line for an event.

    Parameters
    ----------
    seq : int
        The line's number, from 1.
    at_iso : str
        UTC, ISO 8601, ending in ``Z``.
    monotonic_s : float
        A steady clock, s.
    event_name : str
        The event's name.
    payload : mapping
        Plain JSON values only; names are texts, numbers are finite.
    prev : str
        The digest of the line before; `FIRST_PREV` for the first.

    Raises
    ------
    BenchkitError
        If the payload isn't plain JSON, with the path of the first value that isn't.
    """
    if not _AT.match(at_iso):
        raise BenchkitError(f"The time {at_iso!r} can't stand in a journal", "UTC in ISO 8601, ending in Z")
    _demand_plain(payload, "payload")
    _demand_plain(monotonic_s, "monotonic_s")
    members = {
        "seq": seq,
        "at": at_iso,
        "monotonic_s": monotonic_s,
        "event": event_name,
        "payload": payload,
        "prev": prev,
    }
    head = _encode(members)
    digest = hashlib.sha256(head).hexdigest()
    raw = head[:-1] + b',"digest":"' + digest.encode("ascii") + b'"}\n'
    return Line(
        seq=seq,
        at=at_iso,
        monotonic_s=monotonic_s,
        event=event_name,
        payload=dict(payload),
        prev=prev,
        digest=digest,
        raw=raw,
    )


def parse_line(raw: bytes, line_number: int) -> Line:
    """Return the line that `raw` holds, its form and its digest checked.

    Parameters
    ----------
    raw : bytes
        The line with its line feed.
    line_number : int
        Its place in the file, from 1, for the message.

    Raises
    ------
    BenchkitError
        If it is no line of a journal, or its bytes are not those that its digest was made from.
    """
    if not raw.endswith(b"\n"):
        _refuse(line_number, "does not end in a line feed", "one line feed at the end of every line")
    body = raw[:-1]
    tail = TAIL.fullmatch(body, max(0, len(body) - _TAIL_LENGTH))
    if tail is None:
        _refuse(line_number, f"ends in {_quote(body[-24:])}", 'a digest of 64 lower-case hexadecimal digits and "}')
    stated = tail[1].decode("ascii")
    head = body[:-_TAIL_LENGTH] + b"}"
    if hashlib.sha256(head).hexdigest() != stated:
        _refuse(line_number, "has been changed: its bytes do not give its digest", f"the digest {stated[:12]}…")
    try:
        members = json.loads(
            body.decode("utf-8"),
            object_pairs_hook=_without_doubles,
            parse_constant=_no_constant,
            parse_float=_finite,
        )
    except (ValueError, RecursionError) as error:
        _refuse(line_number, f"is not JSON ({error})", "one JSON object")
    if not isinstance(members, dict) or tuple(members) != MEMBERS:
        _refuse(line_number, "has other members", "the members " + ", ".join(MEMBERS))
    _demand_kinds(members, line_number)
    return Line(**members, raw=raw)


def _demand_kinds(members: dict[str, Any], line_number: int) -> None:
    kinds: dict[str, type | tuple[type, ...]] = {
        "seq": int,
        "at": str,
        "monotonic_s": (int, float),
        "event": str,
        "payload": dict,
        "prev": str,
    }
    for name, kind in kinds.items():
        value = members[name]
        if not isinstance(value, kind) or isinstance(value, bool):
            _refuse(
                line_number, f"has {_quote(repr(value).encode())} as {name}", "the kind of value that belongs there"
            )
    if not _AT.match(members["at"]):
        _refuse(line_number, f"was written at {members['at']!r}", "UTC in ISO 8601, ending in Z")
    if not re.fullmatch(r"[0-9a-f]{64}", members["prev"]):
        _refuse(line_number, f"has {members['prev']!r} as prev", "64 lower-case hexadecimal digits")


def _encode(members: Mapping[str, Any]) -> bytes:
    """Return compact JSON in UTF-8.

    A text from the system may hold half of a surrogate pair (an undecodable file name); UTF-8 has no bytes for that,
    so that such a line is written in ASCII with escapes.
    """
    try:
        return json.dumps(members, ensure_ascii=False, allow_nan=False, separators=(",", ":")).encode("utf-8")
    except UnicodeEncodeError:
        return json.dumps(members, ensure_ascii=True, allow_nan=False, separators=(",", ":")).encode("ascii")


def _demand_plain(value: object, path: str) -> None:
    if value is None or isinstance(value, (str, bool, int)):
        return
    if isinstance(value, float):
        if not math.isfinite(value):
            raise BenchkitError(f"A journal can't hold the number {value!r} ({path})", "a finite number")
        return
    if isinstance(value, Mapping):
        for name, part in value.items():
            if not isinstance(name, str):
                raise BenchkitError(f"A journal can't hold the name {name!r} ({path})", "a text")
            _demand_plain(part, f"{path}.{name}")
        return
    if isinstance(value, (list, tuple)):
        for index, part in enumerate(value):
            _demand_plain(part, f"{path}[{index}]")
        return
    raise BenchkitError(f"A journal can't hold a {type(value).__name__} ({path})", "text, numbers, lists or objects")


def _without_doubles(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    found = dict(pairs)
    if len(found) != len(pairs):
        names = [name for name, _ in pairs]
        double = next(name for name in names if names.count(name) > 1)
        raise ValueError(f"the name {double!r} stands twice in one object")
    return found


def _no_constant(text: str) -> NoReturn:
    raise ValueError(f"{text} is no JSON number")


def _finite(text: str) -> float:
    value = float(text)
    if not math.isfinite(value):
        raise ValueError(f"{text} is too large a number")
    return value


def _quote(data: bytes) -> str:
    """Return bytes as something that can be shown: no control character gets through."""
    return repr(data[:60].decode("utf-8", "replace"))


def _refuse(line_number: int, what: str, expected: str) -> NoReturn:
    raise BenchkitError(f"Line {line_number} {what}", expected)
