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
_BOARD_0 = re.compile(r"^(TCPIP|USB|GPIB)0(?=::)")


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
            "Give the host a name, and name it in the bench file",
        )
    raise InstrumentError(
        "bad address", f"{text!r} is no address of an instrument", FORM, "Correct it in the bench file"
    )


def plain_address(text: str) -> str:
    """Return what two spellings of one address have in common: capitals, board 0, other names of a serial port."""
    wanted = text.strip()
    serial = _SERIAL.fullmatch(wanted)
    if serial is not None and os.path.isabs(serial["device"]):
        return f"ASRL{os.path.realpath(serial['device'])}::INSTR"
    return _BOARD_0.sub(r"\1", wanted.upper())


_FORMS: tuple[tuple[Kind, re.Pattern[str]], ...] = (
    ("socket", _SOCKET),
    ("hislip", _HISLIP),
    ("vxi-11", _VXI11),
    ("serial", _SERIAL),
    ("usb", _USB),
)


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
