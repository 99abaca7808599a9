"""The supply over a real socket: the order of messages, what is refused, and what "off" needs to be believed."""

from __future__ import annotations

import socket
import time
from collections.abc import Iterator

import pytest

from benchkit.errors import EntryError, InstrumentError
from benchkit.instruments.link import Link
from benchkit.instruments.profile import shipped, supply_profile
from benchkit.instruments.supply import Supply
from benchkit.instruments.traffic import TrafficLog
from tests.instruments.server import TestSupply


class At:
    """A test supply and the supply that speaks with it."""

    def __init__(self, *, joined: bool = False, bare: bool = False, without: str = "") -> None:
        self.server = TestSupply()
        table = shipped("scpi-supply")
        assert table is not None
        table["questions"]["joined"] = joined
        if without:
            table["questions"][without] = ""
        if bare:
            for part in (table["commands"], table["questions"]):
                for key in [key for key in part if key.startswith(("over_", "clear", "tripped"))]:
                    del part[key]
        profile = supply_profile({**table, "link": {"timeout_s": 0.3, "open_timeout_s": 3.0}})
        self.link = Link("the supply", self.server.address, profile.link.settings(), TrafficLog())
        self.supply = Supply(self.link, profile)
        self.supply.identify().result(10)
        self.server.heard.clear()

    def close(self) -> None:
        self.link.close()
        self.server.close()

    def settings(self) -> list[str]:
        """The messages that set something, in their order."""
        return [message for message in self.server.messages() if not message.endswith(("?", "? (@1,2)"))]


@pytest.fixture
def at() -> Iterator[At]:
    made = At()
    yield made
    made.close()


def test_limit_protection_volts_on_and_both_rails_in_one_message(at: At) -> None:
    sample = at.supply.set(15.0, -14.5, 0.05, True).result(5)
    assert at.settings() == [
        "CURR 0.0500,(@1,2)",
        "VOLT:PROT 17.5000,(@1);:VOLT:PROT 17.5000,(@2)",
        "VOLT 15.0000,(@1);:VOLT 14.5000,(@2)",
        "OUTP ON,(@1,2)",
        "CURR:PROT:STAT ON,(@1,2)",
    ]
    assert sample.outputs == (True, True)
    assert (sample.state.positive_v, sample.state.negative_v) == (15.0, -14.5)
    assert (sample.state.positive_a, sample.state.negative_a) == (0.015, 0.0145)


def test_an_output_that_is_on_is_not_switched_again(at: At) -> None:
    at.supply.set(5.0, -5.0, 0.05, True).result(5)
    at.server.heard.clear()
    at.supply.set(6.0, -6.0, 0.06, True).result(5)
    assert at.settings() == [
        "CURR 0.0600,(@1,2)",
        "CURR:PROT:STAT OFF,(@1,2)",
        "VOLT:PROT 7.6000,(@1);:VOLT:PROT 7.6000,(@2)",
        "VOLT 6.0000,(@1);:VOLT 6.0000,(@2)",
        "CURR:PROT:STAT ON,(@1,2)",
    ]


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
    sent = [message for message in at.settings() if not message.startswith(("*", "OUTP OFF"))]
    assert sent == ["CURR 0.0500,(@1,2)"]


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


def test_what_was_answered_counts_although_the_link_fails_at_the_next_question(at: At) -> None:
    at.supply.set(5.0, -5.0, 0.05, True).result(5)
    assert at.supply.seen_on
    assert at.supply.off().result(5).confirmed
    assert not at.supply.seen_on
    at.server.on.update({1: True, 2: True})
    answered: list[str] = []

    def fault(connection: socket.socket, message: str) -> bool:
        if "OUTP OFF" in message or answered:
            return True
        answered.append(message)
        return False

    at.server.fault = fault
    assert not at.supply.off().result(10).confirmed
    assert answered == ["OUTP? (@1,2)"]
    assert at.supply.seen_on


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
        with pytest.raises(InstrumentError, match="8 answers"):
            joined.supply.sample().result(5)
    finally:
        joined.close()


def test_a_voltage_that_falls_goes_before_the_protection_it_would_trip(at: At) -> None:
    at.supply.set(20.0, -20.0, 0.05, True).result(5)
    at.server.heard.clear()
    sample = at.supply.set(5.0, -25.0, 0.05, True, protection_v=(7.0, 30.0)).result(5)
    assert at.settings()[1:4] == [
        "CURR:PROT:STAT OFF,(@1,2)",
        "VOLT 5.0000,(@1);:VOLT 20.0000,(@2)",
        "VOLT:PROT 7.0000,(@1);:VOLT:PROT 30.0000,(@2)",
    ]
    assert at.settings()[4].startswith("VOLT 5.0000,(@1);:VOLT 25")
    assert (sample.state.protection_positive_v, sample.state.protection_negative_v) == (7.0, 30.0)
    assert not sample.state.tripped


def test_the_protection_stands_where_it_was_asked_for_and_is_not_sent_twice(at: At) -> None:
    first = at.supply.set(1.0, -1.0, 0.05, True, protection_v=(40.0, 40.0)).result(5)
    assert first.state.protection_positive_v == 40.0
    at.server.heard.clear()
    at.supply.set(2.0, -2.0, 0.05, True, protection_v=(40.0, 40.0)).result(5)
    assert not [message for message in at.settings() if message.startswith("VOLT:PROT")]


@pytest.mark.parametrize("levels", [(10.0, 4.0), (5.0, 9.0), (float("nan"), 9.0)])
def test_a_protection_below_its_rail_is_refused_before_anything_is_sent(at: At, levels: tuple[float, float]) -> None:
    with pytest.raises(EntryError, match="over-voltage protection"):
        at.supply.set(5.0, -5.0, 0.05, True, protection_v=levels)
    assert at.settings() == []


def test_a_protection_that_the_supply_did_not_take_raises_no_voltage(at: At) -> None:
    ignores("VOLT:PROT 6", at)
    with pytest.raises(InstrumentError, match=r"VOLT:PROT\? .* as sent"):
        at.supply.set(5.0, -5.0, 0.05, True).result(5)
    assert not any(message.startswith(("VOLT 5", "OUTP ON")) for message in at.settings())


def test_over_current_protection_is_left_off_where_the_limit_shall_hold(at: At) -> None:
    at.supply.set(5.0, -5.0, 0.05, True).result(5)
    assert at.server.over_current_trips == {1: True, 2: True}
    at.supply.set(5.0, -5.0, 0.05, True, over_current=False).result(5)
    assert at.server.over_current_trips == {1: False, 2: False}


def test_an_output_in_its_limit_does_not_arm_over_current_protection(at: At) -> None:
    at.server.load_ohm = 10.0
    sample = at.supply.set(5.0, -5.0, 0.05, True).result(5)
    assert sample.state.in_limit
    assert at.server.is_on
    assert at.server.over_current_trips == {1: False, 2: False}


def test_a_trip_is_seen_and_takes_the_other_output_off_at_once(at: At) -> None:
    at.supply.set(5.0, -5.0, 0.05, True).result(5)
    at.server.over_volts[1] = 4.0
    sample = at.supply.sample().result(5)
    assert sample.outputs == (False, True)
    assert (sample.state.positive_tripped, sample.state.negative_tripped) == (True, False)
    assert at.server.wait_off(2.0)


def test_with_a_trip_nothing_is_switched_on_and_nothing_is_cleared_by_itself(at: At) -> None:
    at.supply.set(5.0, -5.0, 0.05, True).result(5)
    at.server.over_volts[2] = 4.0
    at.supply.sample().result(5)
    outcome = at.supply.off().result(5)
    assert outcome.state is not None
    assert outcome.state.negative_tripped
    assert outcome.how.endswith("its own protection had tripped")
    at.server.heard.clear()
    with pytest.raises(InstrumentError, match="switched off the negative rail") as caught:
        at.supply.set(1.0, -1.0, 0.05, True).result(5)
    assert caught.value.kind == "refused"
    assert at.settings() == []
    assert at.supply.set(0.0, 0.0, 0.05, False).result(5).outputs == (False, False)
    assert not any("CLE" in message for message in at.settings())


def test_a_trip_is_cleared_with_the_outputs_off_and_no_voltage_set(at: At) -> None:
    at.supply.set(5.0, -5.0, 0.05, True).result(5)
    at.server.over_volts[1] = 4.0
    at.supply.sample().result(5)
    assert at.server.wait_off(5), "the look itself takes the other rail off"
    at.server.heard.clear()
    cleared = at.supply.clear_trip().result(5)
    assert at.settings() == ["OUTP OFF,(@1,2)", "VOLT 0.0000,(@1);:VOLT 0.0000,(@2)", "OUTP:PROT:CLE (@1,2)"]
    assert not cleared.state.tripped
    assert cleared.outputs == (False, False)


def test_a_trip_is_not_cleared_while_off_is_not_confirmed(at: At) -> None:
    at.supply.set(5.0, -5.0, 0.05, True).result(5)
    ignores("MEAS:CURR?", at)
    with pytest.raises(InstrumentError, match="not cleared"):
        at.supply.clear_trip().result(10)
    assert not any("CLE" in message or message.startswith("VOLT 0") for message in at.settings())


def test_a_supply_without_a_command_to_clear_says_so() -> None:
    bare = At(bare=True)
    try:
        with pytest.raises(InstrumentError, match="no command that clears") as caught:
            bare.supply.clear_trip().result(5)
        assert caught.value.kind == "unsupported"
        bare.server.heard.clear()
        bare.supply.set(15.0, -14.5, 0.05, True).result(5)
        assert bare.settings() == ["CURR 0.0500,(@1,2)", "VOLT 15.0000,(@1);:VOLT 14.5000,(@2)", "OUTP ON,(@1,2)"]
    finally:
        bare.close()


class Capacitors:
    """Holds the voltage at the terminals after off: what MEAS:VOLT? says falls by a share at each look."""

    def __init__(self, at: At, keeps: float) -> None:
        self.volts, self.keeps, self.at = 20.0, keeps, at
        at.server.fault = self

    def __call__(self, connection: socket.socket, message: str) -> bool:
        if self.at.server.is_on or not message.startswith("MEAS:VOLT?"):
            return False
        connection.sendall(f"{self.volts:.3f},{self.volts:.3f}\n".encode())
        self.volts *= self.keeps
        return True


def test_protection_stays_above_what_capacitors_hold(at: At) -> None:
    at.supply.set(20.0, -20.0, 0.05, True).result(5)
    assert at.supply.off().result(5).confirmed
    held = Capacitors(at, 1.0)
    state = at.supply.set(5.0, -5.0, 0.05, False).result(5).state
    assert (state.protection_positive_v, state.protection_negative_v) == (21.5, 21.5)
    held.volts = 1.0
    assert at.supply.set(5.0, -5.0, 0.05, True).result(5).state.protection_positive_v == 6.5


@pytest.mark.parametrize(
    ("keeps", "words"),
    [(0.9, "18.00 V and -18.00 V at the supply, and falling"), (1.0, "20.00 V and -20.00 V still at the terminals")],
)
def test_capacitors_hold_the_voltage_and_off_is_confirmed_all_the_same(at: At, keeps: float, words: str) -> None:
    at.supply.set(20.0, -20.0, 0.05, True).result(5)
    Capacitors(at, keeps)
    outcome = at.supply.off().result(5)
    assert outcome.confirmed
    assert outcome.how == f"both outputs read back as off, no current flows; {words}"


@pytest.mark.parametrize(("key", "keeps"), [("amps", 1.0), ("output", 1.0), ("output", 0.9)])
def test_without_current_or_read_back_a_voltage_that_stays_is_no_off(key: str, keeps: float) -> None:
    at = At(without=key)
    try:
        at.supply.set(20.0, -20.0, 0.05, True).result(5)
        Capacitors(at, keeps)
        outcome = at.supply.off().result(10)
        assert not outcome.confirmed
        assert outcome.how.startswith("output state unknown: switch it off by hand")
        assert "do not fall" in outcome.how
        assert not at.server.is_on, "off was sent all the same"
    finally:
        at.close()


@pytest.mark.parametrize("key", ["amps", "output"])
def test_without_current_or_read_back_no_voltage_is_off(key: str) -> None:
    at = At(without=key)
    try:
        sample = at.supply.set(20.0, -20.0, 0.05, True).result(5)
        assert sample.outputs == (True, True)
        outcome = at.supply.off().result(10)
        assert outcome.confirmed
        assert outcome.state is not None
        assert outcome.state.output_on is False
        assert at.supply.sample().result(5).outputs == (False, False)
    finally:
        at.close()


def test_a_supply_that_heard_off_only_the_second_time_is_off(at: At) -> None:
    at.supply.set(5.0, -5.0, 0.05, True).result(5)
    missed: list[str] = []

    def deaf_once(connection: socket.socket, message: str) -> bool:
        if message.startswith("OUTP OFF") and not missed:
            missed.append(message)
            return True
        return False

    at.server.fault = deaf_once
    assert at.supply.off().result(5).confirmed
    assert not at.server.is_on
