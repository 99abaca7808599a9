"""One writer a file: a lock that the system takes back when its holder dies.

POSIX has ``flock`` for the whole file; Windows locks a range of bytes, so that one byte far behind any real content
stands for the file and readers are never in its way.
"""

from __future__ import annotations

import sys

_FAR = 2**62


def try_lock(descriptor: int) -> bool:
    """Take the only lock on an open file; False if somebody else holds it.

    The lock ends when the descriptor is closed or its process dies, however it dies.
    """
    if sys.platform == "win32":
        import msvcrt
        import os

        here = os.lseek(descriptor, 0, os.SEEK_CUR)
        os.lseek(descriptor, _FAR, os.SEEK_SET)
        try:
            msvcrt.locking(descriptor, msvcrt.LK_NBLCK, 1)
        except OSError:
            return False
        finally:
            os.lseek(descriptor, here, os.SEEK_SET)
        return True
    else:
        import fcntl

        try:
            fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError:
            return False
        return True
