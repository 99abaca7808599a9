"""Whom to ask, with which profiles, and what is known of an instrument after it has been asked."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

from benchkit.errors import EntryError, InstrumentError
from benchkit.instruments.discovery import SOCKET_PORT, serial_address
from benchkit.instruments.profile import meter_profile, profile_table, shipped, shipped_names, supply_profile

Kind = Literal["meter", "supply"]

FIRST = ("scpi-supply", "scpi-meter")
"""The standard profiles: tried before all others."""


NOT_ASKED = "not asked"
"""What happened to a question after one before it had no answer."""


@dataclass(frozen=True, kw_only=True)
class Candidate:
    """One profile to try: its name as a bench file would have it, its kind and its table."""

    name: str
    kind: Kind
    table: dict[str, Any]


@dataclass(frozen=True, kw_only=True)
class Fit:
    """How far one profile's questions were answered.

    Parameters
    ----------
    profile, kind : str
    answered : tuple of str
        The functions of a meter; of a supply the look at its settings, outputs and readings.
    unanswered : tuple of (str, str)
        The others, with what happened: what was asked, what came, what was expected.
    """

    profile: str
    kind: Kind
    answered: tuple[str, ...]
    unanswered: tuple[tuple[str, str], ...] = ()

    @property
    def complete(self) -> bool:
        """True when every question was answered."""
        return bool(self.answered) and not self.unanswered

    def as_json(self) -> dict[str, Any]:
        """Return it as a plain table."""
        return {
            "profile": self.profile,
            "kind": self.kind,
            "complete": self.complete,
            "answered": list(self.answered),
            "unanswered": [{"question": name, "what_happened": why} for name, why in self.unanswered],
        }


@dataclass(frozen=True, kw_only=True)
class Identified:
    """What is known of one instrument after it has been asked.

    Parameters
    ----------
    asked : str
        What was typed.
    address : str
        At which it answered, or the last that was tried.
    name : str
        Its answer to ``*IDN?``; empty when it never said it.
    fits : tuple of Fit
        The profiles that it answered at least in part, the best first.
    misses : tuple of Fit
        The profiles with which it said its name and answered no question.
    tried : tuple of str
        The profiles that it was tried with.
    baud : int or None
        The speed at which a serial line worked, when it was not the profile's own.
    problem : InstrumentError or None
        Why it could not be identified.
    """

    asked: str
    address: str
    name: str = ""
    fits: tuple[Fit, ...] = ()
    misses: tuple[Fit, ...] = ()
    tried: tuple[str, ...] = ()
    baud: int | None = None
    problem: InstrumentError | None = None

    @property
    def best(self) -> Fit | None:
        """The profile to use, if any was answered."""
        return self.fits[0] if self.fits else None

    @property
    def serial(self) -> str:
        """Its serial number, the third field of its name (IEEE 488.2, 10.14); empty when it gives none."""
        parts = [part.strip() for part in self.name.split(",")]
        return parts[2] if len(parts) > 2 and parts[2].strip("0") else ""

    def as_json(self) -> dict[str, Any]:
        """Return it as a plain table."""
        return {
            "asked": self.asked,
            "address": self.address,
            "name": self.name,
            "serial": self.serial,
            "baud": self.baud,
            "fits": [fit.as_json() for fit in self.fits],
            "misses": [fit.as_json() for fit in self.misses],
            "tried": list(self.tried),
            "problem": None if self.problem is None else str(self.problem),
            "problem_kind": None if self.problem is None else self.problem.kind,
        }


def addresses_for(word: str) -> tuple[str, ...]:
    """Return the addresses to try for what somebody typed: an address, a host's name or number, or a serial port."""
    word = word.strip()
    if not word:
        raise EntryError("An empty address came", "an address, a host or a serial port")
    if "::" in word:
        return (word,)
    if word.startswith("/") or re.fullmatch(r"COM[0-9]+", word, re.IGNORECASE):
        return (serial_address(word),)
    if not re.fullmatch(r"[A-Za-z0-9._-]+", word):
        raise EntryError(
            f"{word!r} is no address of an instrument",
            "an address like TCPIP::192.168.1.20::5025::SOCKET, a host like 192.168.1.20, or a serial port",
        )
    return (f"TCPIP::{word}::{SOCKET_PORT}::SOCKET", f"TCPIP::{word}::hislip0::INSTR", f"TCPIP::{word}::inst0::INSTR")


def candidates(names: Sequence[str] = (), folder: Path = Path()) -> tuple[Candidate, ...]:
    """Return the profiles to try: those that are named, or all that come along, the standard ones first.

    Raises
    ------
    FileError
        For a profile that can't be read.
    """
    found = []
    for name in names or (*FIRST, *(one for one in shipped_names() if one not in FIRST)):
        table = profile_table(name, folder)
        own = "supply" if table.get("kind") == "supply" else "meter"
        (supply_profile if own == "supply" else meter_profile)(table, f"the profile {name}")
        where = name if shipped(name) is not None else str(folder / name)
        found.append(Candidate(name=where, kind="supply" if own == "supply" else "meter", table=table))
    return tuple(found)
