"""Links as bytes: one class for each kind, opened here.

A transport waits in slices of at most `SLICE_S`, never longer, whatever the instrument does: what may block runs in a
thread that can be left behind.
"""

from __future__ import annotations

from benchkit.instruments.address import Address
from benchkit.instruments.settings import PURE_LIBRARY, LinkSettings
from benchkit.instruments.transports.base import SLICE_S, Piece, Transport

__all__ = ["SLICE_S", "Piece", "Transport", "open_transport"]


def open_transport(address: Address, settings: LinkSettings) -> Transport:
    """Open the transport that fits the kind of the address, or the general one for another VISA library.

    Raises
    ------
    InstrumentError
        Of any kind.  It may take longer than the settings say: the caller has to be able to go away.
    """
    from benchkit.instruments.transports import messages, streams

    if settings.library != PURE_LIBRARY:
        return messages.VisaMessages(address, settings)
    match address.kind:
        case "socket":
            return streams.VisaSocket(address, settings)
        case "serial":
            return streams.VisaSerial(address, settings)
        case "vxi-11":
            return messages.Vxi11(address, settings)
        case "hislip":
            return messages.Hislip(address, settings)
        case _:
            return messages.VisaMessages(address, settings)
