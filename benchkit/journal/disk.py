"""Putting bytes on the disk, so that they are there after a power cut."""

from __future__ import annotations

import os
import sys
from pathlib import Path


def flush_to_disk(descriptor: int) -> None:
    """Return when the file's bytes and its length are on the disk.

    Raises
    ------
    OSError
        If the disk did not take them.
    """
    if sys.platform == "darwin":
        import fcntl

        fcntl.fcntl(descriptor, fcntl.F_FULLFSYNC)  # fsync on this system leaves the bytes in the drive's cache
    elif hasattr(os, "fdatasync"):
        os.fdatasync(descriptor)
    else:
        os.fsync(descriptor)


def flush_folder(folder: Path) -> None:
    """Put a folder's entry for a new file on the disk, where the system has such a thing."""
    if sys.platform == "win32":
        return
    descriptor = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def write_all(descriptor: int, data: bytes) -> None:
    """Write every byte or raise OSError; a part may then have been written."""
    view = memoryview(data)
    while view:
        view = view[os.write(descriptor, view) :]
