"""Instruments on loopback that fail on purpose: raw socket, serial line (pty), VXI-11, HiSLIP.

Written from the protocols (RFC 5531 and RFC 4506 for the calls under VXI-11; the VXI-11 and the HiSLIP specification),
so that links are tried against a second reading of them; the numbers of procedures and message types were compared with
those in pyvisa-py.  Everything is unprivileged and stays on this computer.

* `acts` says what an instrument does with a message: say bytes, wait, close, reset.  No act knows which link it is
  played on.
* `instrument` holds the answers, and what was heard.
* `tcp`, `serial_line`, `vxi11`, `hislip` play acts on a link each.  `KINDS` names them.

An instrument deals with one message after the other, as real ones do: while it waits, later messages queue.
"""

from __future__ import annotations

from tests.instruments.fault_bench.acts import Act, Close, Do, Reset, Say, Wait
from tests.instruments.fault_bench.hislip import HislipServer
from tests.instruments.fault_bench.instrument import FaultInstrument, FaultMeter, FaultSupply
from tests.instruments.fault_bench.serial_line import SerialServer
from tests.instruments.fault_bench.server import FaultServer
from tests.instruments.fault_bench.tcp import SocketServer
from tests.instruments.fault_bench.vxi11 import Vxi11Server

KINDS: dict[str, type[FaultServer]] = {
    "socket": SocketServer,
    "serial": SerialServer,
    "vxi-11": Vxi11Server,
    "hislip": HislipServer,
}

__all__ = [
    "KINDS",
    "Act",
    "Close",
    "Do",
    "FaultInstrument",
    "FaultMeter",
    "FaultServer",
    "FaultSupply",
    "HislipServer",
    "Reset",
    "Say",
    "SerialServer",
    "SocketServer",
    "Vxi11Server",
    "Wait",
]
