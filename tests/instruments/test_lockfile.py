"""One process an instrument; the right ends with its holder."""

from __future__ import annotations

import subprocess
import sys

import pytest

from benchkit.errors import InstrumentError
from benchkit.instruments.lockfile import ResourceLock

ADDRESS = "TCPIP::127.0.0.1::1::SOCKET"

HOLD = f"""
import sys
from benchkit.instruments.lockfile import ResourceLock
lock = ResourceLock({ADDRESS!r})
print("held", flush=True)
sys.stdin.read()
"""


def test_a_killed_holder_lets_go() -> None:
    other = subprocess.Popen([sys.executable, "-c", HOLD], stdin=subprocess.PIPE, stdout=subprocess.PIPE)
    assert other.stdin is not None
    assert other.stdout is not None
    try:
        assert other.stdout.readline() == b"held\n"
        with pytest.raises(InstrumentError, match=f"process {other.pid}") as caught:
            ResourceLock(ADDRESS.lower())
        assert caught.value.kind == "refused"
    finally:
        other.kill()
        other.wait()
        other.stdin.close()
        other.stdout.close()
    lock = ResourceLock(ADDRESS)
    with pytest.raises(InstrumentError):
        ResourceLock(ADDRESS)
    lock.release()
    lock.release()
    ResourceLock(ADDRESS).release()
