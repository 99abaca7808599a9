"""Addresses of instruments, as VISA writes them.

This version speaks over raw sockets (``TCPIP::HOST::PORT::SOCKET``).  The other kinds that VISA knows are recognised
and refused by name, so that nobody looks for a spelling mistake.
"""

from __future__ import annotations

import re
from dataclasses import dataclass

from benchkit.errors import InstrumentError

FORM = "an address like TCPIP::192.168.1.20::5025::SOCKET"

_SOCKET = re.compile(r"TCPIP[0-9]*::(?P<host>[^:\s]+)::(?P<port>[0-9]{1,5})::SOCKET", re.IGNORECASE)
_OTHER = re.compile(r"(TCPIP|ASRL|GPIB|USB|PXI|VXI|VICP|PRLGX)[^:\s]*::\S*", re.IGNORECASE)


@dataclass(frozen=True)
class SocketAddress:
    """A raw socket: host, TCP port, and the text that named them."""

    host: str
    port: int
    text: str


def parse_address(text: str) -> SocketAddress:
    """Return the socket that a VISA address names.

    Raises
    ------
    InstrumentError
        ``bad address`` if it is none; ``unsupported`` if it is one of another kind.
    """
    wanted = text.strip()
    match = _SOCKET.fullmatch(wanted)
    if match is not None:
        port = int(match["port"])
        if not 1 <= port <= 65535:
            raise InstrumentError("bad address", f"The address {text!r} has port {port}", "a port from 1 to 65535")
        return SocketAddress(match["host"], port, wanted)
    if _OTHER.fullmatch(wanted):
        raise InstrumentError(
            "unsupported",
            f"The address {text!r} is of a kind that this version does not speak",
            FORM,
            "Most instruments with a network socket have such an address too; see their manual for the port",
        )
    raise InstrumentError(
        "bad address", f"{text!r} is no address of an instrument", FORM, "Correct it in the bench file"
    )
