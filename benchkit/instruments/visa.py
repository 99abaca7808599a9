"""The only module that imports PyVISA: one raw socket, and every way it fails turned into an `InstrumentError`.

What is worked around here (pyvisa-py 0.8)
------------------------------------------
* Opening a refused or unreachable port succeeds, and fails at the first write: an open link is never trusted before
  the instrument has said its name (`benchkit.instruments.conversation`).
* A timeout throws away what had arrived.  The session below PyVISA's resource returns it, so that slices are read
  there: a slice ends at the terminator or after `SLICE_S`, and the caller has its own deadline.
* A peer that has closed looks like silence.  A look at the socket tells them apart after each slice.
* ``TCP_NODELAY`` can't be set as an attribute, and without it an "output off" behind another message waits some 40 ms.
* A host that nobody knows leaves an open socket behind there: names are looked up before.
* The exceptions are not only VISA's: plain OSError, RuntimeError, TypeError, ValueError, Exception come through.
  `boundary` is the one place where they are caught.
* There is one resource manager a process; closing it would close every session, so that it is never closed.
"""

from __future__ import annotations

import select
import socket
import threading
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from typing import Any

from benchkit.errors import InstrumentError
from benchkit.instruments.address import SocketAddress

SLICE_S = 0.05
"""How long one slice of waiting lasts, s: so long a cancelled query goes on at most."""

_manager_lock = threading.Lock()
_manager: Any = None


def resource_manager() -> Any:
    """Return the process's one resource manager; importing PyVISA takes 0.2-0.5 s the first time."""
    global _manager  # noqa: PLW0603
    with _manager_lock:
        if _manager is None:
            import pyvisa

            _manager = pyvisa.ResourceManager("@py")
        return _manager


class VisaSocket:
    """One open raw socket.  Only its owner thread may touch it.

    Parameters
    ----------
    address : SocketAddress
        Where it is.
    read_termination : str
        The one character that ends a reply.
    open_timeout_s : float
        So long may the connection take, s.
    """

    def __init__(self, address: SocketAddress, *, read_termination: str, open_timeout_s: float) -> None:
        self._address = address
        with boundary(address.text, "open"):
            socket.getaddrinfo(address.host, address.port, socket.AF_INET)
            manager = resource_manager()
            self._resource: Any = manager.open_resource(
                address.text,
                open_timeout=int(open_timeout_s * 1000),
                timeout=int(SLICE_S * 1000),
                read_termination=read_termination,
                write_termination="",
            )
            self._session: Any = manager.visalib.sessions[self._resource.session]
            self._socket: socket.socket = self._session.interface
            self._socket.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
            self._socket.setsockopt(socket.SOL_SOCKET, socket.SO_KEEPALIVE, 1)

    def write(self, data: bytes) -> None:
        """Send bytes as they are."""
        with boundary(self._address.text, "write"):
            self._resource.write_raw(data)

    def read_slice(self) -> bytes:
        """Return what has come up to and with the terminator, or up to the end of the slice; may be empty."""
        with boundary(self._address.text, "read"):
            data, _status = self._session.read(4096)
            return bytes(data)

    def pending(self) -> bool:
        """Tell whether bytes wait that nobody has asked for; a closed peer counts as none."""
        with boundary(self._address.text, "read"):
            return bool(self._session._pending_buffer) or bool(self._peek())

    def peer_closed(self) -> bool:
        """Tell whether the other side has closed the connection."""
        with boundary(self._address.text, "read"):
            return self._peek() == b""

    def drain(self, quiet_s: float) -> bytes:
        """Throw away what has come, until nothing comes for `quiet_s`; return the first of it for the log."""
        with boundary(self._address.text, "read"):
            thrown = bytes(self._session._pending_buffer)
            self._session._pending_buffer.clear()
            for _ in range(1000):
                ready, _, _ = select.select([self._socket], [], [], quiet_s)
                if not ready:
                    break
                data = self._socket.recv(65536)
                if not data:
                    break
                thrown += data[: max(0, 200 - len(thrown))]
            return thrown

    def close(self) -> None:
        """Close; safe to call twice, never raises."""
        with suppress(Exception):
            self._resource.close()

    def _peek(self) -> bytes | None:
        """Return b"" when the peer has closed, None when nothing is there, else the first byte."""
        ready, _, _ = select.select([self._socket], [], [], 0)
        return self._socket.recv(1, socket.MSG_PEEK) if ready else None


@contextmanager
def boundary(address: str, doing: str) -> Iterator[None]:
    """Turn whatever PyVISA raises into an `InstrumentError` with a sentence for the person at the bench."""
    try:
        yield
    except InstrumentError:
        raise
    except Exception as error:
        raise translate(error, address, doing) from None


def translate(error: Exception, address: str, doing: str) -> InstrumentError:
    """Return the `InstrumentError` for an exception that came out of PyVISA while opening, writing or reading."""
    text = str(error) or type(error).__name__
    if isinstance(error, ConnectionRefusedError):
        return InstrumentError(
            "link lost",
            f"{address} refused the connection",
            "an instrument that listens there",
            "Check that it is switched on, its network socket is enabled, and the port is right",
        )
    if isinstance(error, PermissionError):
        return InstrumentError(
            "bad address", f"The system does not let us use {address} ({text})", "", "Ask for the right to use it"
        )
    if isinstance(error, (ConnectionError, BrokenPipeError)):
        return InstrumentError(
            "link lost", f"The connection to {address} broke ({text})", "", "Check the cable and the instrument"
        )
    if isinstance(error, socket.gaierror):
        return InstrumentError(
            "bad address",
            f"Nobody knows the host in {address}",
            "a host name or an IPv4 address",
            "Correct the bench file",
        )
    if doing == "open":
        if "could not connect" in text:
            return InstrumentError(
                "link lost", f"{address} did not take the connection ({text})", "", "Check the network and the address"
            )
        if isinstance(error, ImportError):
            return InstrumentError(
                "unsupported", f"PyVISA can't be used ({text})", "pyvisa and pyvisa-py", "Install benchkit again"
            )
        kind = "link lost" if isinstance(error, OSError) else "bad address"
        return InstrumentError(kind, f"{address} can't be opened ({text})", "", "Check the address in the bench file")
    if isinstance(error, (UnicodeError,)):
        return InstrumentError("garbled", f"{address} sent bytes that are no text ({text})", "ASCII text")
    if isinstance(error, NotImplementedError):
        return InstrumentError("unsupported", f"The link to {address} can't do this ({text})")
    return InstrumentError(
        "link lost",
        f"The link to {address} failed: {type(error).__name__}: {text}",
        "",
        "Check the cable and the instrument",
    )
