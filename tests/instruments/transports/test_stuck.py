"""Links that hang in a call: "off" goes over a second link beside them, and the owner is never held up."""

from __future__ import annotations

import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

import pytest

from benchkit.errors import InstrumentError
from benchkit.instruments.address import Address
from benchkit.instruments.conversation import LinkSettings
from benchkit.instruments.link import Link
from benchkit.instruments.traffic import TrafficLog
from benchkit.instruments.transports import open_transport
from tests.instruments.fault_bench import FaultMeter
from tests.instruments.fault_bench.acts import Do
from tests.instruments.fault_bench.hislip import DATA_END, HEADER, HislipServer
from tests.instruments.fault_bench.vxi11 import READ, Vxi11Server

QUESTION = "MEAS:VOLT:DC? 17"
TALK = LinkSettings(timeout_s=1.0, open_timeout_s=2.0)


class StubbornServer(Vxi11Server):
    """Takes no notice of the time-out of a read while it is told to."""

    def __init__(self, instrument: FaultMeter) -> None:
        self.stuck = threading.Event()
        self.go = threading.Event()
        super().__init__(instrument)

    def _core(self, procedure: int, *others: Any) -> tuple[bytes, bool]:
        if procedure == READ and self.stuck.is_set():
            self.go.wait(20.0)
        return super()._core(procedure, *others)


@contextmanager
def linked(address: str, settings: LinkSettings = TALK, **options: Any) -> Iterator[Link]:
    link = Link("the meter", address, settings, TrafficLog(), **options)
    try:
        yield link
    finally:
        link.close(5.0)


def off_in_time(link: Link, meter: FaultMeter) -> None:
    """Cancel what runs, say "off", and wait until the instrument has heard it."""
    began_s = time.monotonic()
    link.submit_urgent(lambda talk: talk.tell_at_once("OUTP OFF")).result(10)
    took_s = time.monotonic() - began_s
    while "OUTP OFF" not in meter.messages() and time.monotonic() - began_s < 5.0:
        time.sleep(0.005)
    assert "OUTP OFF" in meter.messages()
    assert took_s < 1.5


def heard(meter: FaultMeter, message: str) -> None:
    deadline_s = time.monotonic() + 10.0
    while message not in meter.messages() and time.monotonic() < deadline_s:
        time.sleep(0.005)
    assert message in meter.messages()


def test_vxi11_that_takes_no_notice_of_time_outs() -> None:
    meter = FaultMeter()
    with StubbornServer(meter) as server, linked(server.address) as link:
        link.submit(lambda talk: talk.open()).result(10)
        meter.fails_once("MEAS")
        server.stuck.set()
        running = link.submit(lambda talk: talk.ask(QUESTION, str, timeout_s=30.0))
        heard(meter, QUESTION)
        time.sleep(0.1)
        began_s = time.monotonic()
        urgent = link.submit_urgent(lambda talk: talk.tell_at_once("OUTP OFF"))
        with pytest.raises(InstrumentError, match="switched off"):
            running.result(5)
        assert time.monotonic() - began_s < 1.0
        heard(meter, "OUTP OFF")
        server.stuck.clear()
        server.go.set()
        urgent.result(10)
        assert link.submit(lambda talk: talk.ask(QUESTION, float)).result(10) == 17.0


def test_hislip_that_stops_in_the_middle_of_a_message() -> None:
    meter = FaultMeter()
    with HislipServer(meter) as server, linked(server.address) as link:
        link.submit(lambda talk: talk.open()).result(10)

        def half() -> None:
            for session in list(server._sessions.values()):
                session.synchronous.sendall(HEADER.pack(b"HS", DATA_END, 0, 0xFFFFFFFF, 100) + b"+1.7")

        meter.fails_once("MEAS", Do(half))
        running = link.submit(lambda talk: talk.ask(QUESTION, str, timeout_s=30.0))
        heard(meter, QUESTION)
        time.sleep(0.2)
        off_in_time(link, meter)
        with pytest.raises(InstrumentError, match="switched off"):
            running.result(5)
        assert link.submit(lambda talk: talk.ask(QUESTION, float)).result(10) == 17.0


class SlowOpening:
    """Opens a link only when told to, and counts what is closed of it."""

    def __init__(self) -> None:
        self.go = threading.Event()
        self.closed = threading.Event()

    def __call__(self, address: Address, settings: LinkSettings) -> Any:
        assert self.go.wait(20.0)
        opened = open_transport(address, settings)
        closes = opened.close

        def close() -> None:
            closes()
            self.closed.set()

        opened.close = close  # type: ignore[method-assign]
        return opened


def test_an_opening_that_does_not_end_is_left_behind_and_closed_when_it_comes() -> None:
    with Vxi11Server(FaultMeter()) as server:
        opening = SlowOpening()
        with linked(server.address, LinkSettings(open_timeout_s=0.1), opener=opening) as link:
            began_s = time.monotonic()
            with pytest.raises(InstrumentError, match="did not open a link") as caught:
                link.submit(lambda talk: talk.open()).result(10)
            assert caught.value.kind == "timeout"
            assert time.monotonic() - began_s < 2.0
            opening.go.set()
            assert opening.closed.wait(10.0)


def test_off_does_not_wait_for_an_opening() -> None:
    meter = FaultMeter()
    with Vxi11Server(meter) as server:
        opening = SlowOpening()
        with linked(server.address, LinkSettings(open_timeout_s=20.0), opener=opening) as link:
            running = link.submit(lambda talk: talk.open())
            time.sleep(0.1)
            urgent = link.submit_urgent(lambda talk: talk.tell_at_once("OUTP OFF"))
            with pytest.raises(InstrumentError, match="switched off"):
                running.result(2)
            opening.go.set()
            urgent.result(10)
            heard(meter, "OUTP OFF")
            assert opening.closed.wait(10.0)
