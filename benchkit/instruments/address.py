"""Addresses of instruments, as VISA writes them.

======================================  ==========  ===============================================================
form                                    kind        remark
======================================  ==========  ===============================================================
``TCPIP::HOST::PORT::SOCKET``           socket
``TCPIP::HOST[,PORT][::NAME]::INSTR``   vxi-11      with a port the port mapper is not asked
``TCPIP::HOST::hislip0[,PORT]::INSTR``  hislip      port 4880 without one
``ASRL/dev/ttyUSB0::INSTR``             serial      on Windows ``ASRLCOM3::INSTR`` or ``ASRL3::INSTR``
``USB::MAKER::MODEL::SERIAL::INSTR``    usb
anything else that VISA knows           other       only with another VISA library than ``@py``
======================================  ==========  ===============================================================

Another library's addresses are taken as they are: what it knows is its own affair.
"""

from __future__ import annotations

import os
import re
from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

from benchkit.errors import InstrumentError
from benchkit.instruments.settings import PURE_LIBRARY

FORM = (
    "an address like TCPIP::192.168.1.20::5025::SOCKET, TCPIP::192.168.1.20::INSTR, "
    "TCPIP::192.168.1.20::hislip0::INSTR, ASRL/dev/ttyUSB0::INSTR or USB::0x1234::0x5678::SERIAL::INSTR"
)

Kind = Literal["socket", "serial", "vxi-11", "hislip", "usb", "other"]

_HOST = r"(?P<host>[^:,\s]+)"
_SOCKET = re.compile(rf"TCPIP[0-9]*::{_HOST}::(?P<port>[0-9]{{1,5}})::SOCKET", re.IGNORECASE)
_HISLIP = re.compile(
    rf"TCPIP[0-9]*::{_HOST}::(?P<device>hislip[0-9]*)(?:,(?P<port>[0-9]{{1,5}}))?::INSTR", re.IGNORECASE
)
_VXI11 = re.compile(
    rf"TCPIP[0-9]*::{_HOST}(?:,(?P<port>[0-9]{{1,5}}))?(?:::(?P<device>[^:\s]+))?::INSTR", re.IGNORECASE
)
_SERIAL = re.compile(r"ASRL(?P<device>[^:\s]+)(?:::INSTR)?", re.IGNORECASE)
_USB = re.compile(
    r"USB[0-9]*::(?:0x[0-9a-f]{1,4}|[0-9]{1,5})::(?:0x[0-9a-f]{1,4}|[0-9]{1,5})::[^:]+(?:::[0-9]+)?::INSTR",
    re.IGNORECASE,
)
_IPV6 = re.compile(r"TCPIP[0-9]*::\[?[0-9a-f]*:[0-9a-f:.]*\]?(?:::\S*)?", re.IGNORECASE)
_OTHER = re.compile(r"(GPIB|USB|PXI|VXI|VICP|PRLGX|FIREWIRE)[^:\s]*::\S.*", re.IGNORECASE)
_GPIB_BOARD_0 = re.compile(r"^GPIB0+(?=::)")
_CLASSES = ("::INSTR", "::SOCKET", "::RAW", "::INTFC", "::BACKPLANE", "::MEMACC", "::SERVANT")
_HISLIP_PORT = 4880


@dataclass(frozen=True)
class Address:
    """Where an instrument is.

    Parameters
    ----------
    text : str
        As the person wrote it, without blanks around it.
    kind : str
        One of ``socket``, ``serial``, ``vxi-11``, ``hislip``, ``usb``, ``other``.
    host : str
        Its name or IPv4 address in a network; else empty.
    port : int or None
        The TCP port, if the address names one.
    device : str
        The serial port, or the name behind the host; else empty.
    """

    text: str
    kind: Kind
    host: str = ""
    port: int | None = None
    device: str = ""


def parse_address(text: str, library: str = PURE_LIBRARY) -> Address:
    """Return what a VISA address names.

    Parameters
    ----------
    text : str
        The address.
    library : str
        The VISA library that will open it.

    Raises
    ------
    InstrumentError
        ``bad address`` if it is none; ``unsupported`` if it is of a kind that ``@py`` is not used for here.
    """
    wanted = text.strip()
    for kind, form in _FORMS:
        match = form.fullmatch(wanted)
        if match is None:
            continue
        parts = match.groupdict()
        return Address(wanted, kind, parts.get("host") or "", _port(text, parts.get("port")), parts.get("device") or "")
    if library != PURE_LIBRARY and wanted and wanted.isprintable():
        return Address(wanted, "other")
    if _OTHER.fullmatch(wanted):
        raise InstrumentError(
            "unsupported",
            f"The address {text!r} is of a kind that needs a maker's VISA library",
            FORM,
            "Name such a library with --visa or in the bench file, or use the instrument's network socket",
        )
    if _IPV6.fullmatch(wanted) and "::" in wanted[5:]:
        raise InstrumentError(
            "bad address",
            f"The host in {text!r} is no name and no IPv4 address",
            "a host name or an IPv4 address; IPv6 can't be written there",
            "Give the host a name, and put that into the address",
        )
    raise InstrumentError("bad address", f"{text!r} is no address of an instrument", FORM, "Correct the address")


def plain_address(text: str, number_of: Callable[[str], str] = str.upper) -> str:
    """Return what all spellings of one address have in common.

    Capitals, leading zeros, what VISA fills in when it is left out (``::INSTR``, ``::inst0``, HiSLIP's port, the USB
    interface), other names of a serial port, and the board of a network or USB address, which isn't looked at when
    such a link is opened, make no difference.

    Parameters
    ----------
    text : str
        The address.
    number_of : callable, optional
        What to write for a host, such as the number that it has; its name in capitals without it.
    """
    wanted = text.strip()
    for whole in (wanted, f"{wanted}::INSTR"):
        for kind, form in _FORMS:
            if match := form.fullmatch(whole):
                return _plain(kind, match, number_of).upper() if kind != "serial" else _plain_serial(match["device"])
    other = wanted.upper()
    if not other.endswith(_CLASSES):
        other += "::INSTR"
    return re.sub(r"(?<![0-9A-Z.])0+(?=[0-9])", "", _GPIB_BOARD_0.sub("GPIB", other))


_FORMS: tuple[tuple[Kind, re.Pattern[str]], ...] = (
    ("socket", _SOCKET),
    ("hislip", _HISLIP),
    ("vxi-11", _VXI11),
    ("serial", _SERIAL),
    ("usb", _USB),
)


def _plain(kind: Kind, match: re.Match[str], number_of: Callable[[str], str]) -> str:
    """Return a network or USB address with all that VISA fills in."""
    if kind == "usb":
        _, maker, model, serial, *others = match[0].split("::")
        interface = int(others[0]) if len(others) > 1 else 0
        return f"USB::{_number(maker)}::{_number(model)}::{serial}::{interface}::INSTR"
    host = number_of(match["host"])
    port = int(match["port"] or 0)
    if kind == "socket":
        return f"TCPIP::{host}::{port}::SOCKET"
    if kind == "hislip":
        return f"TCPIP::{host}::{match['device']},{port or _HISLIP_PORT}::INSTR"
    return f"TCPIP::{host}{f',{port}' if port else ''}::{match['device'] or 'inst0'}::INSTR"


def _plain_serial(device: str) -> str:
    """Return a serial port's address: the file that a path leads to, or a numbered port."""
    if os.path.isabs(device):
        return f"ASRL{os.path.realpath(device)}::INSTR"
    digits = re.fullmatch(r"(?:COM)?([0-9]+)", device.upper())
    return f"ASRL{int(digits[1]) if digits else device.upper()}::INSTR"


def _number(text: str) -> int:
    return int(text, 16) if text.lower().startswith("0x") else int(text)


def _port(text: str, digits: str | None) -> int | None:
    if digits is None:
        return None
    if not 1 <= int(digits) <= 65535:
        raise InstrumentError(
            "bad address",
            f"The address {text!r} has port {int(digits)}",
            "a port from 1 to 65535",
            "Look the port up in the instrument's manual",
        )
    return int(digits)
