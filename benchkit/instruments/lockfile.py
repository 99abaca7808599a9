"""One benchkit an instrument: a lock file for each address, because VISA's own locks can't be relied on.

The lock is named after what all spellings of an address have in common, with the host's number for its name: the name
server is asked for it, but not waited for long.  A name that can't be resolved then stands for itself.  All numbers of
this computer's own loopback are one, for a server may listen at all of them.
The system takes the lock back when its holder dies, however it dies; the file itself stays and means nothing.
"""

from __future__ import annotations

import hashlib
import os
import socket
import tempfile
import threading
from contextlib import suppress
from pathlib import Path

from benchkit.errors import InstrumentError
from benchkit.instruments.address import plain_address
from benchkit.journal.locking import try_lock

RESOLVE_S = 2.0
"""So long is a name server waited for, s (our own figure)."""

_LOOPBACK = "127.0.0.1"


def host_number(host: str, limit_s: float = RESOLVE_S) -> str:
    """Return the IPv4 number that a host is reached at, the lowest of several; its name in capitals if none is found.

    Parameters
    ----------
    host : str
        A name, or a number in any form.
    limit_s : float
        How long to wait for it; what comes later is left behind in a thread of its own.
    """
    with suppress(OSError):
        return _one_loopback(socket.inet_ntoa(socket.inet_aton(host.rstrip("."))))
    found: list[str] = []

    def resolve() -> None:
        with suppress(OSError, ValueError):
            entries = socket.getaddrinfo(host, None, socket.AF_INET, socket.SOCK_STREAM)
            found.append(min((str(entry[4][0]) for entry in entries), key=socket.inet_aton))

    thread = threading.Thread(target=resolve, name=f"number of {host}", daemon=True)
    thread.start()
    thread.join(limit_s)
    return _one_loopback(found[0]) if found else host.rstrip(".").upper()


def _one_loopback(number: str) -> str:
    return _LOOPBACK if number == "0.0.0.0" or number.startswith("127.") else number


class ResourceLock:
    """The only right to use an address on this computer.

    Parameters
    ----------
    address : str
        As in the bench file; another spelling of it makes no difference.

    Raises
    ------
    InstrumentError
        ``refused`` if another process has it.
    """

    def __init__(self, address: str) -> None:
        folder = Path(tempfile.gettempdir()) / "benchkit-locks"
        digest = hashlib.sha256(plain_address(address, host_number).encode()).hexdigest()[:24]
        flags = os.O_RDWR | os.O_CREAT | getattr(os, "O_NOFOLLOW", 0) | getattr(os, "O_CLOEXEC", 0)
        try:
            if not folder.is_dir():
                folder.mkdir(exist_ok=True)
                folder.chmod(0o1777)
            descriptor = os.open(folder / digest, flags, 0o666)
        except OSError as error:
            raise InstrumentError(
                "refused",
                f"The lock for {address} can't be made in {folder} ({error.strerror})",
                "a folder to write to",
            ) from None
        if not try_lock(descriptor):
            holder = ""
            with suppress(OSError):
                holder = os.read(descriptor, 40).decode("ascii", "replace").strip()
            os.close(descriptor)
            raise InstrumentError(
                "refused",
                f"Another benchkit{f' (process {holder})' if holder.isdigit() else ''} is using {address}",
                "nobody else",
                "End that one first",
            )
        os.ftruncate(descriptor, 0)
        os.write(descriptor, str(os.getpid()).encode("ascii"))
        self._descriptor: int | None = descriptor

    def release(self) -> None:
        """Give the right back; safe to call twice."""
        if self._descriptor is not None:
            os.close(self._descriptor)
            self._descriptor = None
