"""The fault bench itself, against bare PyVISA: what it is told to do is what arrives."""

from __future__ import annotations

import contextlib
import socket
import time
from collections.abc import Iterator
from typing import Any

import pytest
import pyvisa
from pyvisa.errors import VisaIOError

from tests.instruments.fault_bench import (
    KINDS,
    Close,
    FaultMeter,
    FaultServer,
    HislipServer,
    Say,
    SerialServer,
    Vxi11Server,
    Wait,
)
from tests.instruments.fault_bench.__main__ import arguments
from tests.instruments.fault_bench.acts import bytewise, halves
from tests.instruments.fault_bench.server import TcpServer


@pytest.mark.parametrize(
    "given", [[], ["socket"], ["pigeon", "meter"], ["socket", "lamp"], ["socket", "meter", "long"]]
)
def test_as_a_program_it_says_how_to_call_it(given: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit) as caught:
        arguments(given)
    assert caught.value.code == 2
    assert "usage: python -m tests.instruments.fault_bench" in capsys.readouterr().err


def test_as_a_program_it_takes_a_link_an_instrument_and_seconds() -> None:
    assert arguments(["vxi-11", "meter", "1.5"]) == ("vxi-11", "meter", 1.5)
    assert arguments(["socket", "supply"]) == ("socket", "supply", 0.0)


QUESTION = "MEAS:VOLT:DC? 17"
ANSWER = "+1.70000000E+01"


@pytest.fixture(params=sorted(KINDS))
def server(request: pytest.FixtureRequest) -> Iterator[FaultServer]:
    with KINDS[request.param](FaultMeter()) as made:
        yield made


def opened(server: FaultServer, timeout_ms: int = 2000) -> Any:
    return pyvisa.ResourceManager("@py").open_resource(
        server.address, open_timeout=2000, timeout=timeout_ms, read_termination="\n", write_termination="\n"
    )


def closed(resource: Any, server: FaultServer) -> None:
    """Close; a VXI-11 session would wait for an answer to that, which a broken link doesn't give."""
    interface = resource.visalib.sessions[resource.session].interface
    if server.kind == "vxi-11":
        interface.sock.close()
    with contextlib.suppress(Exception):
        resource.close()


def test_it_answers(server: FaultServer) -> None:
    resource = opened(server)
    assert resource.query("*IDN?") == server.instrument.name
    assert resource.query(QUESTION) == ANSWER
    assert resource.query("*ESE 119;*ESE?") == "119"
    assert server.instrument.messages()[-1] == "*ESE 119;*ESE?"
    resource.close()


@pytest.mark.parametrize(
    "acts",
    [bytewise(b"+1.5\n"), halves(b"+1.5\n", 2, 0.3), (Wait(0.3), Say(b"+1.5\n"))],
    ids=["bytes", "halves", "late"],
)
def test_slow_answers_arrive_whole(server: FaultServer, acts: tuple[Any, ...]) -> None:
    server.instrument.fails_once("MEAS", *acts)
    resource = opened(server)
    began = time.monotonic()
    assert resource.query(QUESTION) == "+1.5"
    assert resource.query(QUESTION) == ANSWER
    assert any(not isinstance(act, Wait) for act in acts)
    assert time.monotonic() - began >= sum(act.seconds for act in acts if isinstance(act, Wait))
    resource.close()


def test_silence_is_silence(server: FaultServer) -> None:
    server.instrument.fails_once("MEAS")
    resource = opened(server, 200)
    with pytest.raises(VisaIOError, match="TMO"):
        resource.query(QUESTION)
    assert resource.query(QUESTION) == ANSWER
    resource.close()


def test_an_unfinished_answer_stays_unfinished(server: FaultServer) -> None:
    server.instrument.fails_once("MEAS", Say(b"+1.2345", end=False))
    resource = opened(server, 200)
    with pytest.raises((VisaIOError, RuntimeError, OSError)):
        resource.query(QUESTION)
    closed(resource, server)


def test_a_megabyte_arrives(server: FaultServer) -> None:
    if server.kind == "serial":
        pytest.skip("bare pyvisa-py takes a byte a call on a line: seconds")
    server.instrument.fails_once("MEAS", Say(b"7" * 1_000_000 + b"\n"))
    resource = opened(server)
    assert resource.query(QUESTION) == "7" * 1_000_000
    resource.close()


@pytest.mark.parametrize("act", [Close(), Close(b"+1.2")], ids=["at once", "in the middle"])
def test_a_link_that_breaks_does_not_answer(server: FaultServer, act: Close) -> None:
    server.instrument.fails_once("MEAS", act)
    resource = opened(server, 200)
    with pytest.raises((VisaIOError, RuntimeError, OSError)):
        resource.query(QUESTION)
    closed(resource, server)


@pytest.mark.parametrize("kind", ["socket", "vxi-11", "hislip"])
def test_a_reset_is_a_reset(kind: str) -> None:
    """Seen with a plain socket, so that no library stands between."""
    with KINDS[kind](FaultMeter()) as server:
        assert isinstance(server, TcpServer)
        connection = socket.create_connection(("127.0.0.1", server.port))
        with connection:
            connection.settimeout(5.0)
            deadline = time.monotonic() + 5.0
            while server.connections < 1 and time.monotonic() < deadline:
                time.sleep(0.01)
            server.drop(reset=True)
            with pytest.raises(ConnectionResetError):
                connection.recv(1)


@pytest.mark.parametrize("kind", sorted(KINDS))
def test_killed_and_back_at_the_same_address(kind: str) -> None:
    with KINDS[kind](FaultMeter()) as server:
        address = server.address
        server.stop()
        server.start()
        assert server.address == address
        resource = opened(server)
        assert resource.query(QUESTION) == ANSWER
        resource.close()


def test_a_device_that_vanishes_hangs_up() -> None:
    with SerialServer(FaultMeter()) as server:
        resource = opened(server, 200)
        assert resource.query(QUESTION) == ANSWER
        server.unplug()
        with pytest.raises(OSError, match=r"Errno|readiness"):
            resource.query(QUESTION)
        resource.close()


@pytest.mark.parametrize("options", [{"keeps_unread": True}, {"shared_output": True}])
def test_an_unread_answer_waits_for_the_wrong_question(options: dict[str, bool]) -> None:
    """With bare PyVISA: the fault that the link layer has to get over."""
    with Vxi11Server(FaultMeter(), **options) as server:
        server.instrument.fails_once("MEAS", Wait(0.3), Say(b"+9.9\n"))
        resource = opened(server, 100)
        with pytest.raises(VisaIOError):
            resource.query(QUESTION)
        time.sleep(0.4)
        if server._shared is not None:
            resource.close()
            resource = opened(server, 100)
        assert resource.query(QUESTION) == "+9.9"
        resource.close()


def test_an_answer_without_a_number_waits_for_the_wrong_question() -> None:
    with HislipServer(FaultMeter(), anonymous=True) as server:
        server.instrument.fails_once("MEAS", Wait(0.3), Say(b"+9.9\n"))
        resource = opened(server, 100)
        with pytest.raises(VisaIOError):
            resource.query(QUESTION)
        time.sleep(0.4)
        assert resource.query(QUESTION) == "+9.9"
        resource.close()
