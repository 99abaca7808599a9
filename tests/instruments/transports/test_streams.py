"""Serial lines and sockets: the settings reach the port, silence can end a reply, ports are locked."""

from __future__ import annotations

import time
from collections.abc import Iterator

import pytest
from pyvisa import constants

from benchkit.errors import InstrumentError
from benchkit.instruments.address import parse_address
from benchkit.instruments.conversation import LinkSettings, SerialLine
from benchkit.instruments.link import Link
from benchkit.instruments.traffic import TrafficLog
from benchkit.instruments.transports.streams import VisaSerial, VisaSocket, set_line
from tests.instruments.fault_bench import FaultMeter, Say, SerialServer, Wait
from tests.instruments.fault_bench.tcp import SocketServer

QUESTION = "MEAS:VOLT:DC? 17"


@pytest.fixture
def line() -> Iterator[SerialServer]:
    with SerialServer(FaultMeter()) as server:
        yield server


@pytest.mark.parametrize(
    ("wanted", "port"),
    [
        (SerialLine(), {"baudrate": 9600, "bytesize": 8, "parity": "N", "stopbits": 1}),
        (SerialLine(baud=19200, stop_bits=2), {"baudrate": 19200, "stopbits": 2}),
        (SerialLine(flow="xon/xoff"), {"xonxoff": True, "rtscts": False, "dsrdtr": False}),
        (SerialLine(flow="rts/cts"), {"xonxoff": False, "rtscts": True, "dsrdtr": False}),
        (SerialLine(flow="dtr/dsr"), {"xonxoff": False, "rtscts": False, "dsrdtr": True}),
    ],
)
def test_the_lines_settings_reach_the_port(line: SerialServer, wanted: SerialLine, port: dict[str, object]) -> None:
    opened = VisaSerial(parse_address(line.address), LinkSettings(line=wanted))
    try:
        assert {key: getattr(opened._port, key) for key in port} == port
        assert opened._port.exclusive
    finally:
        opened.close()


class Recorder:
    """Takes attributes as a VISA resource does."""


@pytest.mark.parametrize(
    ("wanted", "parity", "stop_bits"),
    [
        (SerialLine(data_bits=7, parity="even", stop_bits=2), constants.Parity.even, constants.StopBits.two),
        (SerialLine(data_bits=5, parity="odd", stop_bits=1.5), constants.Parity.odd, constants.StopBits.one_and_a_half),
        (SerialLine(), constants.Parity.none, constants.StopBits.one),
    ],
)
def test_what_a_line_of_this_system_can_not_try(
    wanted: SerialLine, parity: constants.Parity, stop_bits: constants.StopBits
) -> None:
    """A pseudo-terminal has eight bits and no parity."""
    recorder = Recorder()
    set_line(recorder, wanted)
    assert vars(recorder) == {
        "baud_rate": 9600,
        "data_bits": wanted.data_bits,
        "parity": parity,
        "stop_bits": stop_bits,
        "flow_control": constants.ControlFlow.none,
    }


def test_settings_that_a_port_has_not_are_named(line: SerialServer) -> None:
    with pytest.raises(InstrumentError, match="7 data bits, parity even") as caught:
        VisaSerial(parse_address(line.address), LinkSettings(line=SerialLine(data_bits=7, parity="even")))
    assert caught.value.kind == "unsupported"
    assert "[link.line]" in caught.value.next_step


@pytest.mark.parametrize("name", ["dtr", "rts"])
def test_a_port_without_such_a_line_says_so(line: SerialServer, name: str) -> None:
    with pytest.raises(InstrumentError, match=f"can't switch its line {name.upper()}") as caught:
        VisaSerial(parse_address(line.address), LinkSettings(line=SerialLine(**{name: False})))  # type: ignore[arg-type]
    assert caught.value.kind == "unsupported"
    VisaSerial(parse_address(line.address), LinkSettings()).close()


def test_a_port_is_opened_once(line: SerialServer) -> None:
    first = VisaSerial(parse_address(line.address), LinkSettings())
    with pytest.raises(InstrumentError, match="Another program is using") as caught:
        VisaSerial(parse_address(line.address), LinkSettings())
    assert caught.value.kind == "refused"
    first.close()
    first.close()
    VisaSerial(parse_address(line.address), LinkSettings()).close()


def test_the_address_may_leave_its_end_out(line: SerialServer) -> None:
    VisaSerial(parse_address(line.address.removesuffix("::INSTR")), LinkSettings()).close()


def test_a_slow_line_is_given_longer_to_be_quiet(line: SerialServer) -> None:
    opened = VisaSerial(parse_address(line.address), LinkSettings(line=SerialLine(baud=300)))
    try:
        began_s = time.monotonic()
        assert opened.drain(0.001) == b""
        assert time.monotonic() - began_s >= 0.13
    finally:
        opened.close()


@pytest.mark.parametrize("server_kind", [SocketServer, SerialServer])
@pytest.mark.parametrize("termination", ["\n", ""])
def test_silence_ends_a_reply_that_has_no_other_end(
    server_kind: type[SocketServer] | type[SerialServer], termination: str
) -> None:
    meter = FaultMeter()
    with server_kind(meter) as server:
        settings = LinkSettings(
            read_termination=termination, ends_by_idle_s=0.15, sync="", timeout_s=5.0, open_timeout_s=5.0
        )
        link = Link("the meter", server.address, settings, TrafficLog())
        assert link.submit(lambda talk: talk.open()).result(10) == meter.name
        for acts in ((Say(b"+17", end=False),), (Say(b"+1", end=False), Wait(0.03), Say(b"7", end=False))):
            meter.fails_once("MEAS", *acts)
            began_s = time.monotonic()
            assert link.submit(lambda talk: talk.ask(QUESTION, str.strip)).result(10) == "+17"
            assert 0.15 <= time.monotonic() - began_s < 3.0
        link.close()


def test_a_socket_waits_for_a_slice_and_no_longer() -> None:
    with SocketServer(FaultMeter()) as server:
        opened = VisaSocket(parse_address(server.address), LinkSettings())
        try:
            began_s = time.monotonic()
            assert opened.read_piece(0.05, 10.0) == (b"", False)
            assert 0.04 < time.monotonic() - began_s < 1.0
            opened.write(b"*IDN?\n")
            assert opened.read_piece(5.0, 10.0).data.endswith(b"\n")
            assert not opened.pending()
        finally:
            opened.close()


def test_a_longer_reply_than_one_reading_of_the_system_is_taken_whole_and_soon() -> None:
    """Each byte in a call of its own would take half a second on a line."""
    for server_kind in (SocketServer, SerialServer):
        meter = FaultMeter()
        with server_kind(meter) as server:
            link = Link("the meter", server.address, LinkSettings(timeout_s=20.0), TrafficLog())
            link.submit(lambda talk: talk.open()).result(10)
            text = "7" * 60_000
            meter.fails_once("MEAS", Say(text.encode() + b"\n"))
            assert link.submit(lambda talk: talk.ask(QUESTION, str)).result(30) == text
            link.close()
