"""The supply over a real socket: the order of messages, what is refused, and what "off" needs to be believed."""

from __future__ import annotations

import socket
import time
from collections.abc import Iterator

import pytest

from benchkit.errors import InstrumentError
from benchkit.instruments.link import Link
from benchkit.instruments.profile import shipped, supply_profile
from benchkit.instruments.supply import Supply
from benchkit.instruments.traffic import TrafficLog
from tests.instruments.server import TestSupply


class At:
    """A test supply and the supply that speaks with it."""

    def __init__(self, *, joined: bool = False) -> None:
        self.server = TestSupply()
        table = shipped("scpi-supply")
        assert table is not None
        table["questions"]["joined"] = joined
        profile = supply_profile({**table, "link": {"timeout_s": 0.3, "open_timeout_s": 0.5}})
        self.link = Link("the supply", self.server.address, profile.link.settings(), TrafficLog())
        self.supply = Supply(self.link, profile)
        self.supply.identify().result(10)
        self.server.heard.clear()

    def settings(self) -> list[str]:
        """The messages that set something, in their order."""
        return [message for message in self.server.messages() if not message.endswith(("?", "? (@1,2)"))]


@pytest.fixture
def at() -> Iterator[At]:
    made = At()
    yield made
    made.link.close()
    made.server.close()


def test_limit_before_volts_before_on_and_both_rails_in_one_message(at: At) -> None:
    sample = at.supply.set(15.0, -14.5, 0.05, True).result(5)
    assert at.settings() == [
        "CURR 0.0500,(@1,2)",
        "VOLT 15.0000,(@1);:VOLT 14.5000,(@2)",
        "OUTP ON,(@1,2)",
    ]
    assert sample.outputs == (True, True)
    assert (sample.state.positive_v, sample.state.negative_v) == (15.0, -14.5)
    assert (sample.state.positive_a, sample.state.negative_a) == (0.015, 0.0145)


def test_an_output_that_is_on_is_not_switched_again(at: At) -> None:
    at.supply.set(5.0, -5.0, 0.05, True).result(5)
    at.server.heard.clear()
    at.supply.set(6.0, -6.0, 0.06, True).result(5)
    assert at.settings() == ["CURR 0.0600,(@1,2)", "VOLT 6.0000,(@1);:VOLT 6.0000,(@2)"]


def test_off_comes_first_when_it_shall_be_off(at: At) -> None:
    at.supply.set(5.0, -5.0, 0.05, True).result(5)
    at.server.heard.clear()
    assert at.supply.set(0.0, 0.0, 0.05, False).result(5).outputs == (False, False)
    assert at.settings()[0] == "OUTP OFF,(@1,2)"


def ignores(start: str, at: At) -> None:
    at.server.fault = lambda connection, message: message.startswith(start)


def test_a_limit_that_the_supply_did_not_take_raises_no_voltage(at: At) -> None:
    ignores("CURR 0", at)
    with pytest.raises(InstrumentError, match=r"CURR\? .* 0.1 A and 0.1 A") as caught:
        at.supply.set(5.0, -5.0, 0.05, True).result(5)
    assert caught.value.kind == "refused"
    assert at.settings() == ["CURR 0.0500,(@1,2)", "OUTP OFF,(@1,2)"]
    assert not at.server.is_on


def test_a_voltage_that_the_supply_did_not_take_is_never_switched_on(at: At) -> None:
    ignores("VOLT 5", at)
    with pytest.raises(InstrumentError, match="as sent"):
        at.supply.set(5.0, -5.0, 0.05, True).result(5)
    assert "OUTP ON,(@1,2)" not in at.settings()


def test_one_output_alone_is_switched_off_again(at: At) -> None:
    def half(connection: socket.socket, message: str) -> bool:
        if message.startswith("OUTP ON"):
            at.server.on[1] = True
            return True
        return False

    at.server.fault = half
    with pytest.raises(InstrumentError, match="positive on, negative off"):
        at.supply.set(5.0, -5.0, 0.05, True).result(5)
    assert not at.server.is_on


def test_an_error_in_the_queue_is_raised_and_the_output_is_off(at: At) -> None:
    errors = ['-222,"Data out of range"', '+0,"No error"']

    def reports(connection: socket.socket, message: str) -> bool:
        if message != "SYST:ERR?" or not errors:
            return False
        connection.sendall(errors.pop(0).encode() + b"\n")
        return True

    at.server.fault = reports
    with pytest.raises(InstrumentError, match="Data out of range"):
        at.supply.set(5.0, -5.0, 0.05, True).result(5)
    assert not at.server.is_on


def test_nothing_more_is_set_after_the_link_broke_in_between(at: At) -> None:
    def breaks(connection: socket.socket, message: str) -> bool:
        if message.startswith("CURR?") and at.server.connections == 1:
            at.server.drop_connections()
            return True
        return False

    at.server.fault = breaks
    with pytest.raises(InstrumentError, match="Nothing more was set") as caught:
        at.supply.set(5.0, -5.0, 0.05, True).result(5)
    assert caught.value.kind == "link lost"
    assert not any(message.startswith(("VOLT 5", "OUTP ON")) for message in at.settings())


def test_off_is_confirmed_by_reading_back(at: At) -> None:
    at.supply.set(5.0, -5.0, 0.05, True).result(5)
    outcome = at.supply.off().result(5)
    assert outcome.confirmed
    assert outcome.state is not None
    assert outcome.state.output_on is False
    assert "read back as off" in outcome.how


@pytest.mark.parametrize("ignored", ["OUTP OFF", "OUTP?", "MEAS:CURR?", "*IDN?", ""])
def test_off_is_not_believed_when_anything_is_missing(at: At, ignored: str) -> None:
    at.supply.set(5.0, -5.0, 0.05, True).result(5)
    ignores(ignored, at)
    at.server.drop_connections() if ignored == "*IDN?" else None
    began = time.monotonic()
    outcome = at.supply.off().result(10)
    assert time.monotonic() - began < 4.0
    assert not outcome.confirmed
    assert outcome.how.startswith("output state unknown: switch it off by hand")
    if ignored not in {"OUTP OFF", ""}:
        assert not at.server.is_on, "off was sent all the same"


def test_off_is_not_believed_while_current_flows(at: At) -> None:
    at.supply.set(5.0, -5.0, 0.05, True).result(5)

    def lies(connection: socket.socket, message: str) -> bool:
        if message.startswith("OUTP?"):
            connection.sendall(b"0,0\n")
            return True
        return message.startswith("OUTP OFF")

    at.server.fault = lies
    at.server.load_ohm = 100.0
    outcome = at.supply.off().result(10)
    assert not outcome.confirmed
    assert "still flow" in outcome.how


def test_off_over_a_broken_link_opens_a_new_one_and_says_off_before_anything_else(at: At) -> None:
    at.supply.set(5.0, -5.0, 0.05, True).result(5)
    at.server.drop_connections()
    at.server.heard.clear()
    assert at.supply.off().result(5).confirmed
    assert at.server.messages()[0] == "OUTP OFF,(@1,2)"


def test_off_in_the_middle_of_a_late_reply_is_sent_at_once(at: At) -> None:
    at.supply.set(5.0, -5.0, 0.05, True).result(5)

    def late(connection: socket.socket, message: str) -> bool:
        if not message.startswith("MEAS:VOLT?") or not at.server.is_on:
            return False
        time.sleep(0.25)
        return False

    at.server.fault = late
    at.supply.sample()
    time.sleep(0.05)
    began = time.monotonic()
    off = at.supply.off()
    assert off.result(5).confirmed
    assert at.server.off_time() - began < 0.5
    assert not at.server.is_on


def test_joined_questions_are_one_message_and_give_the_same_state(at: At) -> None:
    joined = At(joined=True)
    try:
        one = joined.supply.set(5.0, -6.0, 0.0055, True).result(5)
        assert one == at.supply.set(5.0, -6.0, 0.0055, True).result(5)
        assert (one.state.positive_in_limit, one.state.negative_in_limit) == (False, True)
        joined.server.heard.clear()
        assert joined.supply.sample().result(5) == one
        assert len(joined.server.messages()) == 1

        def short(connection: socket.socket, message: str) -> bool:
            if not message.startswith("OUTP?"):
                return False
            connection.sendall(b"1,1;5.0,6.0;0.1,0.1\n")
            return True

        joined.server.fault = short
        with pytest.raises(InstrumentError, match="6 answers"):
            joined.supply.sample().result(5)
    finally:
        joined.link.close()
        joined.server.close()
