"""The meter over a real socket: functions, ranges, samples, overload, and how long a reading may take."""

from __future__ import annotations

import socket
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
    assert at.server.messages() == [message]
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
    assert len(at.server.messages()) == 1


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
    assert at.server.messages() == []


def test_a_configured_meter_is_configured_once_for_all_samples(configured: At) -> None:
    reading = configured.meter.read("dc volts", 10.0, 3).result(5)
    assert configured.server.messages() == ["CONF:VOLT:DC 10", "READ?", "READ?", "READ?"]
    assert (reading.value, reading.values) == (2.0, (1.0, 2.0, 3.0))
    configured.meter.read("ohms").result(5)
    assert configured.server.messages()[4:] == ["CONF:RES", "READ?"]


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
