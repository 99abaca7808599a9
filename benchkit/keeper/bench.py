"""The keeper's instruments: made from the plain table that the screen sends, and owned from then on.

Importing this module pulls in PyVISA's users and the profiles' checks; the keeper does so after it has said hello.
"""

from __future__ import annotations

from collections.abc import Mapping
from concurrent.futures import Future
from dataclasses import dataclass, field
from typing import Any

from benchkit.errors import InstrumentError
from benchkit.instruments.link import Link
from benchkit.instruments.lockfile import ResourceLock
from benchkit.instruments.meter import Meter
from benchkit.instruments.names import demand_serial
from benchkit.instruments.profile import meter_profile, supply_profile
from benchkit.instruments.supply import Supply
from benchkit.instruments.traffic import TrafficLog

CLOSE_WAIT_S = 0.2
"""How long the keeper waits for an owner thread to close its instrument, s."""


class OwnedMeter:
    """A meter with its lock.

    Parameters
    ----------
    table : mapping
        ``address``, ``profile`` (a table or a shipped name), optional ``serial``.
    log : TrafficLog
    """

    def __init__(self, table: Mapping[str, Any], log: TrafficLog) -> None:
        profile = meter_profile(table.get("profile", "scpi-meter"), "the meter's profile")
        self.serial = str(table.get("serial") or "")
        self.lock = ResourceLock(str(table["address"]))
        settings = profile.link.settings(_library(table))
        try:
            self.meter = Meter(Link("the meter", str(table["address"]), settings, log), profile)
        except InstrumentError:
            self.lock.release()
            raise

    def close(self) -> None:
        """Let go of it."""
        self.meter.close(CLOSE_WAIT_S)
        self.lock.release()


class OwnedSupply:
    """A supply with its lock.

    Parameters
    ----------
    table : mapping
        ``address``, ``profile`` (a table or a shipped name), optional ``serial``.
    log : TrafficLog
    locked : bool
        False to go ahead although another process has the lock: only for switching off.
    """

    def __init__(self, table: Mapping[str, Any], log: TrafficLog, *, locked: bool = True) -> None:
        profile = supply_profile(table.get("profile", "scpi-supply"), "the supply's profile")
        self.serial = str(table.get("serial") or "")
        self.lock = ResourceLock(str(table["address"])) if locked else None
        settings = profile.link.settings(_library(table))
        try:
            self.supply = Supply(Link("the supply", str(table["address"]), settings, log), profile)
        except InstrumentError:
            if self.lock is not None:
                self.lock.release()
            raise

    def close(self) -> None:
        """Let go of it; this switches nothing."""
        self.supply.close(CLOSE_WAIT_S)
        if self.lock is not None:
            self.lock.release()


@dataclass
class Opened:
    """A bench whose instruments are being asked for their names.

    Parameters
    ----------
    supply, meter
        What is owned now; also one that does not answer, so that "off" can be tried.
    asked : list of (str, str, Future of str)
        Label, pinned serial number, and the name to come.
    problems : list of Exception
        What could not even be begun.
    """

    supply: OwnedSupply | None = None
    meter: OwnedMeter | None = None
    asked: list[tuple[str, str, Future[str]]] = field(default_factory=list)
    problems: list[Exception] = field(default_factory=list)

    def names(self) -> dict[str, str | None]:
        """Return the names, once all futures are done.

        Raises
        ------
        Exception
            The first problem there was.
        """
        if self.problems:
            raise self.problems[0]
        found: dict[str, str | None] = {"meter": None, "supply": None}
        for label, serial, future in self.asked:
            found[label] = future.result()
            demand_serial(f"the {label}", future.result(), serial)
        return found


def open_bench(bench: Mapping[str, Any], log: TrafficLog) -> Opened:
    """Own the instruments that a bench names and ask for their names, without waiting for them."""
    opened = Opened()
    if bench.get("supply") is not None:
        try:
            opened.supply = OwnedSupply(bench["supply"], log)
            opened.asked.append(("supply", opened.supply.serial, opened.supply.supply.identify()))
        except Exception as error:
            opened.problems.append(error)
    if bench.get("meter") is not None:
        try:
            opened.meter = OwnedMeter(bench["meter"], log)
            opened.asked.append(("meter", opened.meter.serial, opened.meter.meter.identify()))
        except Exception as error:
            opened.problems.append(error)
    return opened


def _library(table: Mapping[str, Any]) -> str:
    """Return the VISA library that a bench names for an instrument; "" is the usual one."""
    return str(table.get("library") or "")
