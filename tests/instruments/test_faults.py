"""How a link over a socket gets over a fault: what is asked again, what is never sent twice, threads, order, the log.

Which fault is named how, on every link, stands in ``test_fault_table``.  The servers are on loopback.  Times are limits
for a loaded machine, not measurements.
"""

from __future__ import annotations

import socket
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import suppress
from functools import partial

import pytest

from benchkit.errors import InstrumentError
from benchkit.instruments.conversation import Conversation
from benchkit.instruments.link import Link
from benchkit.instruments.meter import Meter
from benchkit.instruments.numbers import NumberRules, parse_number
from benchkit.instruments.profile import meter_profile, shipped
from benchkit.instruments.traffic import TrafficLog
from tests.instruments.server import ScpiServer, TestMeter

QUESTION = "MEAS:VOLT:DC?"
RULES = NumberRules()

Fault = Callable[[socket.socket, str], bool]


def profile(timeout_s: float = 0.3) -> dict[str, object]:
    table = shipped("scpi-meter")
    assert table is not None
    return {
        **table,
        "link": {"timeout_s": timeout_s, "open_timeout_s": 0.5},
        "timing": {"power_line_cycles": 0.01, "settling_s": 0.0, "ac_settling_s": 0.0, "autorange_s": 0.0},
    }


class At:
    """A test meter, a link to it, and its log."""

    def __init__(self, server: ScpiServer, timeout_s: float = 0.3) -> None:
        self.server = server
        self.log = TrafficLog()
        checked = meter_profile(profile(timeout_s))
        self.link = Link("the meter", server.address, checked.link.settings(), self.log)
        self.meter = Meter(self.link, checked)

    def ask(self, timeout_s: float | None = None) -> float | object:
        return self.link.submit(
            lambda talk: talk.ask(QUESTION, lambda text: parse_number(text, RULES), timeout_s=timeout_s)
        ).result(10)


@pytest.fixture
def at() -> Iterator[At]:
    with TestMeter() as server:
        made = At(server)
        assert made.meter.identify().result(10) == server.name
        yield made
        made.link.close()


def once(fault: Fault) -> Fault:
    """The fault at the first reading only."""
    left = [1]

    def act(connection: socket.socket, message: str) -> bool:
        if not message.startswith("MEAS") or not left:
            return False
        left.clear()
        return fault(connection, message)

    return act


def silence(connection: socket.socket, message: str) -> bool:
    return True


def says(data: bytes) -> Fault:
    def act(connection: socket.socket, message: str) -> bool:
        connection.sendall(data)
        return True

    return act


def closes(data: bytes = b"", *, reset: bool = False) -> Fault:
    def act(connection: socket.socket, message: str) -> bool:
        if data:
            connection.sendall(data)
        if reset:
            connection.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, b"\1\0\0\0\0\0\0\0")
            connection.close()
        else:
            connection.shutdown(socket.SHUT_RDWR)
        return True

    return act


def late(data: bytes, seconds: float) -> Fault:
    def act(connection: socket.socket, message: str) -> bool:
        def speak() -> None:
            with suppress(OSError):
                connection.sendall(data)

        threading.Timer(seconds, speak).start()
        return True

    return act


FAULTS = [
    pytest.param(silence, id="silence"),
    pytest.param(says(b"+1.234"), id="no end"),
    pytest.param(closes(b"+1.2"), id="peer closes mid reply"),
    pytest.param(closes(), id="peer closes"),
    pytest.param(closes(reset=True), id="reset"),
    pytest.param(says(b"+1.2\xb5V\n"), id="bytes above 0x7F"),
    pytest.param(says("1.5 Ω\n".encode()), id="unit that nobody named"),
    pytest.param(says(b"\x1b[2J\x07\x00\n"), id="control characters"),
    pytest.param(says(b"\n"), id="empty line"),
    pytest.param(says(b"1.0\n2.0\n"), id="two lines"),
    pytest.param(says(b"x" * 70000), id="endless"),
    pytest.param(late(b"+7.0\n", 0.5), id="late"),
]


@pytest.mark.parametrize("fault", FAULTS)
def test_a_single_fault_is_got_over_by_asking_again(at: At, fault: Fault) -> None:
    at.server.fault = once(fault)
    assert at.ask() == 0.012345
    assert at.server.messages().count(QUESTION) == 2


def test_a_peer_that_closes_is_found_long_before_the_timeout(at: At) -> None:
    at.server.fault = lambda connection, message: message.startswith("MEAS") and closes()(connection, message)
    began = time.monotonic()
    with pytest.raises(InstrumentError) as caught:
        at.ask(timeout_s=30.0)
    assert caught.value.kind == "link lost"
    assert time.monotonic() - began < 2.0


def test_an_unasked_line_is_thrown_away(at: At) -> None:
    at.server._open[0].sendall(b"+99.0\n")
    time.sleep(0.1)
    assert at.ask() == 0.012345
    assert at.ask() == 0.012345


def test_a_reply_in_pieces_is_one_reply(at: At) -> None:
    def pieces(connection: socket.socket, message: str) -> bool:
        for byte in b"-4.5\r\n":
            connection.sendall(bytes([byte]))
            time.sleep(0.005)
        return True

    at.server.fault = once(pieces)
    assert at.ask() == -4.5
    assert at.server.messages().count(QUESTION) == 1


def test_a_setting_is_never_sent_twice(at: At) -> None:
    at.server.fault = lambda connection, message: message == "SET 1" and closes()(connection, message)

    def job(talk: Conversation) -> None:
        talk.tell("SET 1")
        talk.ask(QUESTION, lambda text: parse_number(text, RULES))

    at.link.submit(job).result(10)
    assert at.server.messages().count("SET 1") == 1
    assert at.server.connections == 2


def test_a_refused_port_is_found_although_opening_succeeds() -> None:
    with socket.create_server(("127.0.0.1", 0)) as listener:
        port = listener.getsockname()[1]
    link = Link(
        "the meter", f"TCPIP::127.0.0.1::{port}::SOCKET", meter_profile(profile()).link.settings(), TrafficLog()
    )
    began = time.monotonic()
    with pytest.raises(InstrumentError, match="refused the connection") as caught:
        Meter(link, meter_profile("scpi-meter")).identify().result(10)
    assert caught.value.kind == "link lost"
    assert "switched on" in caught.value.next_step
    assert time.monotonic() - began < 2.0
    link.close()


def test_a_listener_that_never_answers_is_no_instrument() -> None:
    with TestMeter() as server:
        server.fault = silence
        at = At(server)
        with pytest.raises(InstrumentError) as caught:
            at.meter.identify().result(10)
        assert caught.value.kind == "timeout"
        server.fault = None
        assert at.meter.identify().result(10) == server.name
        at.link.close()


def test_the_first_question_may_be_lost() -> None:
    with TestMeter() as server:
        lost = [1]

        def loses(connection: socket.socket, message: str) -> bool:
            return bool(lost and lost.pop())

        server.fault = loses
        at = At(server)
        assert at.meter.identify().result(10) == server.name
        at.link.close()


def test_another_instrument_after_a_break_is_refused(at: At) -> None:
    at.server.name = "Own,Other Meter,M-2,1.0"
    at.server.drop_connections()
    with pytest.raises(InstrumentError, match="answers now") as caught:
        at.ask()
    assert caught.value.kind == "refused"


def test_an_unknown_host_says_so() -> None:
    link = Link(
        "the meter", "TCPIP::no-such-host.invalid::5025::SOCKET", meter_profile(profile()).link.settings(), TrafficLog()
    )
    with pytest.raises(InstrumentError) as caught:
        Meter(link, meter_profile("scpi-meter")).identify().result(20)
    assert caught.value.kind == "bad address"
    link.close()


def test_urgent_work_cancels_what_runs_within_a_slice_and_drops_what_waits(at: At) -> None:
    at.server.fault = lambda connection, message: message.startswith("MEAS")
    running = at.link.submit(lambda talk: talk.ask(QUESTION, str, timeout_s=30.0))
    waiting = at.link.submit(lambda talk: talk.tell("SET 1"))
    time.sleep(0.1)
    began = time.monotonic()
    urgent = at.link.submit_urgent(lambda talk: talk.tell_at_once("OFF"))
    urgent.result(5)
    assert time.monotonic() - began < 0.2
    for future in (running, waiting):
        with pytest.raises(InstrumentError, match="switched off"):
            future.result(5)
    time.sleep(0.05)
    assert at.server.messages()[-1] == "OFF"
    assert "SET 1" not in at.server.messages()


def test_one_thread_owns_the_instrument_whoever_asks(at: At) -> None:
    """8 threads ask 100 questions each; every answer belongs to its question."""
    at.server.answer = lambda message: message.partition(" ")[2] or None  # type: ignore[method-assign]
    wrong: list[str] = []

    def echo(token: str, talk: Conversation) -> str:
        return talk.ask(f"ECHO? {token}", str)

    def asks(name: int) -> None:
        for number in range(100):
            token = f"{name}-{number}"
            got = at.link.submit(partial(echo, token)).result(10)
            if got != token:
                wrong.append(f"{token}: {got}")

    threads = [threading.Thread(target=asks, args=(name,)) for name in range(8)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert wrong == []
    assert at.server.connections == 1


def test_messages_behind_each_other_are_not_held_back(at: At) -> None:
    """Without TCP_NODELAY the second message waits some 40 ms for the peer's delayed acknowledgement."""
    durations = []
    at.ask()  # the first question after opening is closed by a mark
    for _ in range(15):
        before = len(at.server.messages())

        def job(talk: Conversation) -> float:
            began = time.monotonic()
            talk.tell("SET 1")
            talk.ask(QUESTION, str)
            return time.monotonic() - began

        durations.append(at.link.submit(job).result(5))
        assert len(at.server.messages()) == before + 2
    assert sorted(durations)[7] < 0.02


def test_closing_is_bounded_and_later_work_is_refused(at: At) -> None:
    at.server.fault = lambda connection, message: message.startswith("MEAS")
    running = at.link.submit(lambda talk: talk.ask(QUESTION, str, timeout_s=30.0))
    time.sleep(0.05)
    began = time.monotonic()
    at.link.close()
    assert time.monotonic() - began < 1.0
    with pytest.raises(InstrumentError):
        running.result(1)
    with pytest.raises(InstrumentError, match="closed by benchkit"):
        at.ask()


def test_the_log_is_bounded_and_printable(at: At) -> None:
    at.server.fault = once(says(b"\x1b[2J\xb5\n"))
    for _ in range(300):
        at.ask()
    entries = at.log.entries()
    assert len(entries) == 500
    assert all(entry.isprintable() and entry.isascii() for entry in entries)
    assert any("sent 'MEAS:VOLT:DC?" in entry for entry in entries)
