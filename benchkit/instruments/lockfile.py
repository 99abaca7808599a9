"""One benchkit an instrument: a lock file for each address, because VISA's own locks can't be relied on.

The system takes the lock back when its holder dies, however it dies; the file itself stays and means nothing.
"""

from __future__ import annotations

import hashlib
import os
import tempfile
from contextlib import suppress
from pathlib import Path

from benchkit.errors import InstrumentError
from benchkit.instruments.address import plain_address
from benchkit.journal.locking import try_lock


class ResourceLock:
    """The only right to use an address on this computer.

    Parameters
    ----------
    address : str
        As in the bench file; capitals, board 0 and the other names of a serial port make no difference.

    Raises
    ------
    InstrumentError
        ``refused`` if another process has it.
    """

    def __init__(self, address: str) -> None:
        folder = Path(tempfile.gettempdir()) / "benchkit-locks"
        digest = hashlib.sha256(plain_address(address).encode()).hexdigest()[:24]
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
