"""One process an instrument; the right ends with its holder."""

from __future__ import annotations

import socket
import subprocess
import sys
import threading
import time
from typing import Any

import pytest

from benchkit.errors import InstrumentError
from benchkit.instruments.lockfile import ResourceLock, host_number

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


@pytest.mark.parametrize(
    "other",
    [
        "TCPIP::localhost::1::SOCKET",
        "TCPIP::127.1::1::SOCKET",
        "tcpip0::LOCALHOST::00001::socket",
        "TCPIP1::127.0.0.1::1::SOCKET",
        "TCPIP::127.0.0.1.::1::SOCKET",
        "TCPIP::2130706433::1::SOCKET",
        "TCPIP::127.0.1.1::1::SOCKET",
        "TCPIP::0.0.0.0::1::SOCKET",
    ],
)
def test_another_spelling_has_the_same_lock(other: str) -> None:
    lock = ResourceLock(ADDRESS)
    try:
        with pytest.raises(InstrumentError, match="is using"):
            ResourceLock(other)
    finally:
        lock.release()
    ResourceLock(other).release()


def test_other_hosts_and_ports_have_other_locks() -> None:
    addresses = [ADDRESS, "TCPIP::127.0.0.1::2::SOCKET", "TCPIP::192.0.2.1::1::SOCKET", "TCPIP::192.0.2.2::1::SOCKET"]
    locks = [ResourceLock(address) for address in addresses]
    for lock in locks:
        lock.release()


def test_a_name_has_the_lowest_of_its_numbers(monkeypatch: pytest.MonkeyPatch) -> None:
    entries = [(socket.AF_INET, socket.SOCK_STREAM, 6, "", (number, 0)) for number in ("192.0.2.30", "192.0.2.4")]
    monkeypatch.setattr(socket, "getaddrinfo", lambda *_: entries)
    assert host_number("bench") == "192.0.2.4"


def test_a_name_that_nobody_knows_stands_for_itself(monkeypatch: pytest.MonkeyPatch) -> None:
    def unknown(*_: Any) -> Any:
        raise socket.gaierror(-2, "Name or service not known")

    monkeypatch.setattr(socket, "getaddrinfo", unknown)
    assert host_number("Bench.") == "BENCH"
    monkeypatch.setattr(socket, "getaddrinfo", lambda *_: [])
    assert host_number("bench") == "BENCH"


def test_a_name_server_that_does_not_answer_is_not_waited_for(monkeypatch: pytest.MonkeyPatch) -> None:
    answered = threading.Event()
    monkeypatch.setattr(socket, "getaddrinfo", lambda *_: answered.wait(20.0) and [])
    began_s = time.monotonic()
    try:
        assert host_number("bench", 0.1) == "BENCH"
        assert time.monotonic() - began_s < 5.0
    finally:
        answered.set()


@pytest.mark.parametrize("host", ["a..b", "x" * 300, "\u00e4" * 70])
def test_a_name_that_can_be_none_stands_for_itself(host: str) -> None:
    assert host_number(host) == host.upper()
