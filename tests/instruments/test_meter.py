"""The meter over a real socket: functions, ranges, samples, overload, and how long a reading may take."""

from __future__ import annotations

import socket
import time
from collections.abc import Iterator
from typing import Any

import pytest

from benchkit.errors import InstrumentError
from benchkit.instruments.link import Link
from benchkit.instruments.meter import MOST_SAMPLES, Meter
from benchkit.instruments.profile import MeterProfile, meter_profile, shipped
from benchkit.instruments.traffic import TrafficLog
from tests.instruments.server import TestMeter

CONFIGURED = {
    "functions": {"dc volts": ["CONF:VOLT:DC", "READ?"], "ohms": ["CONF:RES", "READ?"]},
    "ranged": {"dc volts": ["CONF:VOLT:DC {range}", "READ?"]},
}


class ReadMeter(TestMeter):
    """Is configured first and read then; each reading is one volt more than the one before."""

    def __init__(self) -> None:
        self.count = 0
        self.configured = ""
        super().__init__()

    def answer(self, message: str) -> str | None:
        if message.startswith("CONF:"):
            self.configured = message
            return None
        if message == "READ?":
            self.count += 1
            return f"{self.count:+.6E}" if self.configured else "+9.91E+37"
        return super().answer(message)


class At:
    """A test meter and the meter that speaks with it."""

    def __init__(self, server: TestMeter, table: dict[str, Any]) -> None:
        self.server = server
        base = shipped("scpi-meter")
        assert base is not None
        self.profile: MeterProfile = meter_profile({**base, **table, "link": {"timeout_s": 0.3, "open_timeout_s": 3.0}})
        self.link = Link("the meter", server.address, self.profile.link.settings(), TrafficLog())
        self.meter = Meter(self.link, self.profile)
        self.meter.identify().result(10)
        server.heard.clear()

    def asked(self) -> list[str]:
        """What the meter heard, without the marks."""
        return [message for message in self.server.messages() if not message.startswith("*ESE")]

    def close(self) -> None:
        self.link.close()
        self.server.close()


@pytest.fixture
def at() -> Iterator[At]:
    made = At(TestMeter(), {})
    yield made
    made.close()


@pytest.fixture
def configured() -> Iterator[At]:
    made = At(ReadMeter(), CONFIGURED)
    yield made
    made.close()


@pytest.mark.parametrize(
    ("function", "range", "message"),
    [
        ("dc volts", None, "MEAS:VOLT:DC?"),
        ("dc volts", 10.0, "MEAS:VOLT:DC? 10"),
        ("ohms", 1e6, "MEAS:RES? 1000000"),
        ("dc volts", 0.1, "MEAS:VOLT:DC? 0.1"),
        ("diode", None, "MEAS:DIOD?"),
    ],
)
def test_what_is_asked(at: At, function: str, range: float | None, message: str) -> None:
    reading = at.meter.read(function, range).result(5)
    assert at.asked() == [message]
    assert (reading.value, reading.function, reading.range) == (0.012345, function, range)
    assert reading.meter == "Own,Test Meter,M-1,1.0"


@pytest.mark.parametrize(
    ("answer", "negative"), [("+9.90000000E+37", False), ("-9.90000000E+37", True), ("9.91E37", False), ("OVLD", False)]
)
def test_an_overload_is_no_number_and_ends_the_samples(at: At, answer: str, negative: bool) -> None:
    assert isinstance(at.server, TestMeter)
    at.server.reading = answer
    reading = at.meter.read("ohms", None, 5).result(5)
    assert (reading.value, reading.overload, reading.negative, reading.values) == (None, True, negative, ())
    assert len(at.asked()) == 1


@pytest.mark.parametrize(
    ("function", "range", "samples"),
    [
        ("dc amps", None, 1),
        ("diode", 1.0, 1),
        ("ohms", 0.0, 1),
        ("ohms", float("nan"), 1),
        ("ohms", None, 0),
        ("ohms", None, MOST_SAMPLES + 1),
    ],
)
def test_what_can_not_be_asked(at: At, function: str, range: float | None, samples: int) -> None:
    with pytest.raises(InstrumentError) as caught:
        at.meter.read(function, range, samples)
    assert caught.value.kind == "unsupported"
    assert at.asked() == []


def test_a_configured_meter_is_configured_once_for_all_samples(configured: At) -> None:
    reading = configured.meter.read("dc volts", 10.0, 3).result(5)
    assert configured.asked() == ["CONF:VOLT:DC 10", "READ?", "READ?", "READ?"]
    assert (reading.value, reading.values) == (2.0, (1.0, 2.0, 3.0))
    configured.meter.read("ohms").result(5)
    assert configured.asked()[4:] == ["CONF:RES", "READ?"]


def test_a_link_that_breaks_between_samples_configures_anew(configured: At) -> None:
    server = configured.server
    assert isinstance(server, ReadMeter)

    def breaks(connection: socket.socket, message: str) -> bool:
        if message == "READ?" and server.count == 1 and server.connections == 1:
            server.configured = ""
            server.drop_connections()
            return True
        return False

    server.fault = breaks
    reading = configured.meter.read("dc volts", None, 3).result(10)
    assert not reading.overload, "a meter that lost its function would have said so"
    assert server.messages().count("CONF:VOLT:DC") == 2
    assert reading.values == (1.0, 3.0, 4.0), "what an unconfigured meter said was thrown away"


def test_the_countdown_is_that_of_the_profile(at: At) -> None:
    assert at.meter.expected_s("ac volts") == at.profile.expected_s("ac volts") == pytest.approx(8.4)
    assert at.meter.expected_s("dc volts", 10.0, 10) == pytest.approx(10 * (0.4 + 0.5))


class Doubling:
    """Counts its readings; the fourth is preceded by the third once more, and comes itself a little later."""

    def __init__(self) -> None:
        self.count = 0

    def __call__(self, connection: socket.socket, message: str) -> bool:
        if not message.startswith("MEAS:"):
            return False
        self.count += 1
        if self.count == 4:
            connection.sendall(b"3.0\n")
        time.sleep(0.02)
        connection.sendall(b"%d.0\n" % self.count)
        return True


def test_one_answer_that_comes_twice_shifts_no_later_reading(at: At) -> None:
    at.server.fault = doubling = Doubling()
    for _ in range(8):
        assert at.meter.read("dc volts").result(10).value == doubling.count
    assert doubling.count == 9, "only the reading that could not be believed was taken once more"


def test_one_answer_that_comes_twice_shifts_no_later_sample(at: At) -> None:
    at.server.fault = Doubling()
    values = at.meter.read("dc volts", None, 8).result(10).values
    assert values == (1.0, 2.0, 3.0, 5.0, 6.0, 7.0, 8.0, 9.0)


def test_a_meter_that_says_all_twice_is_not_believed(at: At) -> None:
    def twice(connection: socket.socket, message: str) -> bool:
        if message.startswith("MEAS:"):
            connection.sendall(b"1.0\n1.0\n")
            return True
        return False

    at.server.fault = twice
    with pytest.raises(InstrumentError, match="more than one line"):
        at.meter.read("dc volts").result(10)
    assert len(at.asked()) == 2, "it is asked again once, not for ever"


@pytest.mark.parametrize("sync", ["", "*ESE {n};*ESE?"], ids=["has no mark", "does not answer it"])
def test_a_meter_without_marks_is_read_all_the_same(sync: str) -> None:
    server = TestMeter()
    answer = server.answer
    server.answer = lambda message: None if message.startswith("*ESE") else answer(message)  # type: ignore[method-assign]
    base = shipped("scpi-meter")
    assert base is not None
    profile = meter_profile({**base, "link": {"timeout_s": 0.3, "open_timeout_s": 3.0, "sync": sync}})
    meter = Meter(Link("the meter", server.address, profile.link.settings(), TrafficLog()), profile)
    try:
        meter.identify().result(10)
        for _ in range(3):
            assert meter.read("dc volts").result(5).value == 0.012345
        marks = [message for message in server.messages() if message.startswith("*ESE")]
        assert len(marks) == (1 if sync else 0)
    finally:
        meter.close()
        server.close()
