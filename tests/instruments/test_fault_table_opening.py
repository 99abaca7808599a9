"""What fails before the first answer: addresses, hosts, ports, drivers, locks; and what must not leak on the way."""

from __future__ import annotations

import contextlib
import os
import socket
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from benchkit.errors import InstrumentError
from benchkit.instruments.lockfile import ResourceLock
from tests.instruments.fault_bench import KINDS, FaultMeter, HislipServer, SerialServer, Wait
from tests.instruments.fault_bench.bench import MeterBench

NETWORK = tuple(kind for kind in KINDS if kind != "serial")
FORMS = {
    "socket": "TCPIP::{host}::{port}::SOCKET",
    "vxi-11": "TCPIP::{host},{port}::inst0::INSTR",
    "hislip": "TCPIP::{host}::hislip0,{port}::INSTR",
}


def opening_error(address: str, within_s: float) -> InstrumentError:
    """Return what opening an address ends with, in time."""
    began = time.monotonic()
    try:
        with MeterBench(address) as bench:
            error = bench.meter.identify().exception(60)
    except InstrumentError as raised:
        error = raised
    assert isinstance(error, InstrumentError), error
    assert time.monotonic() - began < within_s
    assert error.message.isprintable()
    assert address in error.message
    assert error.next_step, error.message
    return error


def unused_port() -> int:
    with socket.create_server(("127.0.0.1", 0)) as listener:
        return int(listener.getsockname()[1])


@pytest.mark.parametrize("kind", NETWORK)
def test_refused(kind: str) -> None:
    error = opening_error(FORMS[kind].format(host="127.0.0.1", port=unused_port()), 4.0)
    assert error.kind == "link lost"
    assert "switched on" in error.next_step


@pytest.mark.skipif(sys.platform != "linux", reason="an address that is unreachable everywhere is known for Linux only")
@pytest.mark.parametrize("kind", NETWORK)
def test_unreachable(kind: str) -> None:
    """Linux refuses to connect to the broadcast address, with the error of a network without a route."""
    with pytest.raises(OSError, match="unreachable"):
        socket.create_connection(("255.255.255.255", 5025), 1.0)
    error = opening_error(FORMS[kind].format(host="255.255.255.255", port=5025), 4.0)
    assert error.kind == "link lost"


@pytest.fixture
def deaf_port() -> Iterator[int]:
    """A port whose queue of connections is full: the next one is neither taken nor refused."""
    listener = socket.socket()
    callers: list[socket.socket] = []
    try:
        listener.bind(("127.0.0.1", 0))
        listener.listen(0)
        port = listener.getsockname()[1]
        for _ in range(20):
            caller = socket.socket()
            callers.append(caller)
            caller.settimeout(0.2)
            try:
                caller.connect(("127.0.0.1", port))
            except TimeoutError:
                break
        else:
            pytest.skip("this system takes connections beyond its queue")
        yield port
    finally:
        for caller in callers:
            caller.close()
        listener.close()


@pytest.mark.parametrize("kind", NETWORK)
def test_a_host_that_does_not_even_refuse(kind: str, deaf_port: int) -> None:
    error = opening_error(FORMS[kind].format(host="127.0.0.1", port=deaf_port), 6.0)
    assert error.kind in {"link lost", "timeout"}


@pytest.mark.parametrize("kind", NETWORK)
def test_a_host_that_nobody_knows(kind: str) -> None:
    error = opening_error(FORMS[kind].format(host="no-such-host.invalid", port=5025), 20.0)
    assert error.kind == "bad address"
    assert "host" in error.message


def test_a_serial_port_that_is_not_there(tmp_path: Path) -> None:
    error = opening_error(f"ASRL{tmp_path}/ttyUSB7::INSTR", 4.0)
    assert error.kind in {"bad address", "link lost"}


def test_a_serial_port_that_is_a_file(tmp_path: Path) -> None:
    (tmp_path / "plain").write_text("no terminal")
    error = opening_error(f"ASRL{tmp_path}/plain::INSTR", 4.0)
    assert error.kind in {"bad address", "link lost"}


@pytest.mark.skipif(os.name != "posix" or os.geteuid() == 0, reason="the superuser may open everything")
def test_a_serial_port_without_the_right_to_it(tmp_path: Path) -> None:
    port = tmp_path / "ttyUSB0"
    port.write_text("")
    port.chmod(0)
    error = opening_error(f"ASRL{port}::INSTR", 4.0)
    assert error.kind == "bad address"
    assert "right" in error.message


@pytest.mark.parametrize(
    ("address", "kind"),
    [
        ("GPIB0::5::INSTR", {"unsupported"}),
        ("USB0::0x1234::0x5678::SN1::INSTR", {"unsupported", "link lost", "bad address"}),
        ("PXI0::3::INSTR", {"unsupported"}),
        ("TCPIP::127.0.0.1::70000::SOCKET", {"bad address"}),
        ("TCPIP::127.0.0.1::0::SOCKET", {"bad address"}),
        ("TCPIP::fe80::1::5025::SOCKET", {"bad address"}),
        ("TCPIP::127.0.0.1::5025::SOKET", {"bad address"}),
        ("COM3", {"bad address"}),
        ("192.168.1.20", {"bad address"}),
        ("", {"bad address"}),
        ("\x1b[2J", {"bad address"}),
    ],
)
def test_addresses_that_lead_nowhere(address: str, kind: set[str]) -> None:
    began = time.monotonic()
    try:
        with MeterBench(address) as bench:
            error = bench.meter.identify().exception(60)
    except InstrumentError as raised:
        error = raised
    assert isinstance(error, InstrumentError), error
    assert error.kind in kind, error.message
    assert error.message.isprintable()
    assert error.expected or error.next_step, error.message
    assert time.monotonic() - began < 10.0


@pytest.mark.parametrize("kind", sorted(KINDS))
def test_a_failed_opening_leaves_nothing_open(kind: str) -> None:
    """Twenty tries at something that isn't there: as many file descriptors as before, and no thread more."""
    server = KINDS[kind](FaultMeter())
    with server:
        address = server.address
    descriptors = Path("/proc/self/fd")
    if not descriptors.is_dir():
        pytest.skip("the open files can't be counted here")
    opening_error(address, 5.0)
    before = len(list(descriptors.iterdir()))
    for _ in range(20):
        opening_error(address, 5.0)
    assert len(list(descriptors.iterdir())) <= before + 2


@pytest.mark.parametrize("kind", sorted(KINDS))
def test_opening_and_closing_leaves_nothing_open(kind: str) -> None:
    descriptors = Path("/proc/self/fd")
    if not descriptors.is_dir():
        pytest.skip("the open files can't be counted here")
    with KINDS[kind](FaultMeter()) as server:
        counts: list[int] = []
        for _ in range(12):
            with MeterBench(server.address) as bench:
                assert bench.read(2.0) == 2.0
            deadline = time.monotonic() + 2.0
            while time.monotonic() < deadline and counts and len(list(descriptors.iterdir())) > counts[0]:
                time.sleep(0.01)  # the server closes its own ends a little later
            counts.append(len(list(descriptors.iterdir())))
        assert counts[-1] <= counts[1] + 1


@pytest.mark.parametrize("kind", sorted(KINDS))
def test_the_first_question_may_be_lost(kind: str) -> None:
    """Opening a port resets some instruments: what comes first finds nobody."""
    meter = FaultMeter()
    meter.fails_once("*IDN?")
    with KINDS[kind](meter) as server, MeterBench(server.address) as bench:
        assert bench.meter.identify().result(20) == meter.name
        assert bench.read(2.0) == 2.0


@pytest.mark.parametrize("kind", sorted(KINDS))
def test_the_first_answer_may_be_slow_and_answered_twice(kind: str) -> None:
    """The second question for the name is asked while the first is still being answered."""
    meter = FaultMeter()
    meter.fails_once("*IDN?", Wait(0.5), *meter.acts("*IDN?"))
    with KINDS[kind](meter) as server, MeterBench(server.address, {"open_timeout_s": 1.5}) as bench:
        assert bench.meter.identify().result(20) == meter.name
        time.sleep(0.3)
        assert [bench.read(number) for number in (2.0, 3.0)] == [2.0, 3.0]


@pytest.mark.parametrize("spam", [b"\n", b"+1.0\n", b"noise "], ids=["empty lines", "readings", "no lines"])
@pytest.mark.parametrize("kind", sorted(KINDS))
def test_an_instrument_that_talks_all_the_time(kind: str, spam: bytes) -> None:
    """A meter that prints its readings unasked, or a line set wrongly: an end is found, and so does "off" at once."""
    meter = FaultMeter()
    stop = threading.Event()
    with KINDS[kind](meter) as server:

        def talk() -> None:
            while not stop.wait(0.002):
                with contextlib.suppress(OSError, ValueError):
                    server.blurt(spam)

        talker = threading.Thread(target=talk, daemon=True)
        talker.start()
        try:
            with MeterBench(server.address) as bench:
                began = time.monotonic()
                error = bench.meter.identify().exception(30)
                assert error is None or isinstance(error, InstrumentError), error
                assert time.monotonic() - began < 15.0
                opening = bench.meter.identify()
                time.sleep(0.3)
                began = time.monotonic()
                with contextlib.suppress(InstrumentError):
                    bench.link.submit_urgent(lambda conversation: conversation.tell_at_once("ABOR")).result(30)
                deadline = time.monotonic() + 5.0
                while "ABOR" not in meter.messages() and time.monotonic() < deadline:
                    time.sleep(0.01)
                assert meter.heard_at("ABOR") - began < 1.0
                with contextlib.suppress(InstrumentError):
                    opening.result(30)
        finally:
            stop.set()
            talker.join(5.0)
        with MeterBench(server.address) as bench:
            assert bench.read(3.0) == 3.0


def test_hislip_keeps_the_standard_output_clean(capfd: pytest.CaptureFixture[str]) -> None:
    """pyvisa-py prints when a server prefers overlap mode; the terminal belongs to the screen."""
    with HislipServer(FaultMeter(), overlap=True) as server, MeterBench(server.address) as bench:
        assert bench.read(2.0) == 2.0
    caught = capfd.readouterr()
    assert (caught.out, caught.err) == ("", "")


@pytest.mark.parametrize("kind", sorted(KINDS))
def test_trouble_keeps_output_and_errors_clean(kind: str, capfd: pytest.CaptureFixture[str]) -> None:
    with KINDS[kind](FaultMeter()) as server, MeterBench(server.address) as bench:
        assert bench.read(2.0) == 2.0
        server.stop()
        assert bench.error(3.0) is not None
    caught = capfd.readouterr()
    assert (caught.out, caught.err) == ("", "")


@pytest.mark.parametrize("kind", sorted(KINDS))
def test_two_on_one_address(kind: str) -> None:
    with KINDS[kind](FaultMeter()) as server:
        lock = ResourceLock(server.address)
        try:
            with pytest.raises(InstrumentError, match=f"process {os.getpid()}") as caught:
                ResourceLock(server.address.lower().replace("instr", "INSTR") if kind != "serial" else server.address)
            assert caught.value.kind == "refused"
        finally:
            lock.release()
        ResourceLock(server.address).release()


def test_two_names_of_one_serial_port() -> None:
    """``/dev/serial/by-id/…`` and ``/dev/ttyUSB0`` are one device: who has it open keeps it."""
    with SerialServer(FaultMeter()) as server, MeterBench(server.address) as bench:
        assert bench.read(2.0) == 2.0
        error = opening_error(f"ASRL{os.path.realpath(server.path)}::INSTR", 4.0)
        assert error.kind == "refused", error.message
        assert bench.read(3.0) == 3.0


HOLDER = """
import sys
from benchkit.instruments.lockfile import ResourceLock
lock = ResourceLock(sys.argv[1])
print("held", flush=True)
sys.stdin.read()
"""


def test_the_lock_of_another_process_names_it_and_dies_with_it() -> None:
    address = f"TCPIP::127.0.0.1::{unused_port()}::SOCKET"
    with subprocess.Popen(
        [sys.executable, "-c", HOLDER, address], stdin=subprocess.PIPE, stdout=subprocess.PIPE
    ) as holder:
        assert holder.stdout is not None
        assert holder.stdout.readline() == b"held\n"
        with pytest.raises(InstrumentError, match=f"process {holder.pid}"):
            ResourceLock(address)
        holder.kill()
        holder.wait(10)
        deadline = time.monotonic() + 5.0
        while True:
            with contextlib.suppress(InstrumentError):
                ResourceLock(address).release()
                break
            assert time.monotonic() < deadline
            time.sleep(0.02)
