"""The file name of a record, made from the unit's serial number and the name of the channel.

Rules
-----
* A serial number is whatever is typed or scanned: slashes, dots, control characters, 300 letters, the names that
  Windows keeps for itself.  None of that reaches the file system: a name holds only ``a-z A-Z 0-9 -``, the suffix
  aside, and never begins with a dash.
* The readable part alone could make two units look like one (``A/1`` and ``A-1``, or ``a1`` and ``A1`` where the file
  system doesn't tell them apart), so eight digits of the SHA-256 of the serial number follow it.  The same serial
  number has the same beginning always.
* Then the start of the walk in UTC, so that a folder lists a unit's walks in their order.
* Where the walk is of one channel among several, its readable name comes last, as ``ch-L``; a name that had to be
  changed for it gets four digits of its SHA-256 behind it.  What the channel is really called stands in the record.
* A walk that finds its name taken gets a further number, ``-2`` and on; who reached for it first doesn't matter.
* A name is at most ``LONGEST`` characters, far below what any file system in use allows.
"""

from __future__ import annotations

import hashlib
import os
import re
import unicodedata
from datetime import UTC, datetime
from pathlib import Path

from benchkit.errors import FileError

SUFFIX = ".jsonl"
"""What the name of every record ends in."""

READABLE = 40
"""The most characters that the readable part has."""

READABLE_CHANNEL = 12
"""The most characters that the readable part of a channel's name has."""

LONGEST = READABLE + len("-01234567-20260131T235959Z-ch-") + READABLE_CHANNEL + len("-0123-999") + len(SUFFIX)
"""The most characters that a whole name has."""

_MOST_IN_ONE_SECOND = 999

_NUMBERED = re.compile(r"(.*-\d{8}T\d{6}Z(?:-ch-[A-Za-z0-9-]+?)?)-(\d{1,3})" + re.escape(SUFFIX))


def slug(serial: str) -> str:
    """Return the readable part of a name: letters without accents, digits, single dashes; ``unit`` if nothing is left.

    It is not unique; see `unit_prefix`.
    """
    plain = unicodedata.normalize("NFKD", serial)
    plain = "".join(letter for letter in plain if not unicodedata.combining(letter))
    plain = re.sub(r"[^A-Za-z0-9]+", "-", plain).strip("-")
    return plain[:READABLE].strip("-") or "unit"


def unit_prefix(serial: str) -> str:
    """Return what the names of all records of one unit begin with.

    Parameters
    ----------
    serial : str
        The serial number exactly as the record holds it; white space at its ends doesn't count.

    Examples
    --------
    >>> unit_prefix("../T40 0017")
    'T40-0017-a6ef3863'
    """
    serial = serial.strip()
    digest = hashlib.sha256(serial.encode("utf-8", "surrogatepass")).hexdigest()[:8]
    return f"{slug(serial)}-{digest}"


def channel_part(channel: str) -> str:
    """Return what the name of a record has for its channel; "" for the only channel of a unit.

    Examples
    --------
    >>> channel_part("L")
    '-ch-L'
    >>> channel_part("../rear")
    '-ch-rear-6510'
    """
    channel = channel.strip()
    if not channel:
        return ""
    readable = slug(channel)[:READABLE_CHANNEL].strip("-")
    if readable != channel:
        readable += "-" + hashlib.sha256(channel.encode("utf-8", "surrogatepass")).hexdigest()[:4]
    return f"-ch-{readable}"


def record_name(serial: str, begun: datetime, channel: str = "") -> str:
    """Return the file name of a walk on the unit `serial`, or on one channel of it, that began at `begun`.

    Raises
    ------
    ValueError
        If `begun` has no time zone: a record's name never depends on where the computer stands.
    """
    if begun.tzinfo is None:
        raise ValueError("the start of a walk needs a time zone")
    return f"{unit_prefix(serial)}-{begun.astimezone(UTC):%Y%m%dT%H%M%SZ}{channel_part(channel)}{SUFFIX}"


def in_order(name: str) -> tuple[str, int, str]:
    """Return what file names are sorted by: a unit's walks by their start, those of one second by their number.

    Examples
    --------
    >>> names = ["a-20260131T101500Z-10.jsonl", "a-20260131T101500Z-2.jsonl", "a-20260131T101500Z.jsonl"]
    >>> sorted(names, key=in_order) == names[::-1]
    True
    """
    numbered = _NUMBERED.fullmatch(name)
    return (name.removesuffix(SUFFIX), 1, name) if numbered is None else (numbered[1], int(numbered[2]), name)


def free_path(folder: Path, serial: str, begun: datetime, channel: str = "") -> Path:
    """Return a path in `folder` for a new record that is not taken yet.

    The folder need not exist.  Whoever creates the file has to do so exclusively, and ask anew when somebody else was
    quicker; this only picks the name.

    Raises
    ------
    FileError
        If the folder holds 999 records of this unit from this very second.
    """
    first = folder / record_name(serial, begun, channel)
    if not os.path.lexists(first):
        return first
    for number in range(2, _MOST_IN_ONE_SECOND + 1):
        path = first.with_name(f"{first.name.removesuffix(SUFFIX)}-{number}{SUFFIX}")
        if not os.path.lexists(path):
            return path
    raise FileError(
        str(folder),
        "",
        f"holds {_MOST_IN_ONE_SECOND} records of the unit {serial!r} from one second",
        "at most that",
        "Name another folder with --records",
    )
