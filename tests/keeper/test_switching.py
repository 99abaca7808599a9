"""The keeper's hand on the supply over real pipes and sockets: ramps, volts, silence, the meter."""

from __future__ import annotations

import re
import socket
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from benchkit.errors import InstrumentError
from benchkit.events import ContactLost, Noted, OutputOff, SupplyState, Tripped
from benchkit.keeper.client import WatchLines
from benchkit.keeper.minding import SETTING_S, SUPPLY_AGE_S
from tests.keeper.helpers import Bench, Shared, beats, bench, wait_until

WATCH = WatchLines(positive_a=0.02, negative_a=0.02, own_interval_s=0.05)


@pytest.fixture(scope="module")
def shared() -> Iterator[Shared]:
    made = Shared(None)
    yield made
    made.client.close()


@pytest.fixture
def at(tmp_path: Path, shared: Shared) -> Iterator[Bench]:
    """A bench with a record, its supply off."""
    made = Bench(tmp_path, shared)
    made.connect()
    made.client.open_journal(made.record, Noted(text="begin")).result(5)
    yield made
    shared.tidy()
    made.supply.close()
    made.meter.close()


def volts_sent(at: Bench) -> list[tuple[float, float]]:
    """The pairs of voltages that were sent, in their order, with the sign of their rail."""
    pairs = []
    for message in at.supply.messages():
        found = re.findall(r"VOLT ([\d.]+),? ?\(@([12])\)", message)
        if len(found) == 2:
            pairs.append((float(found[0][0]), 0.0 - float(found[1][0])))
    return pairs


# -- ramps ----------------------------------------------------------------------------------------------------------


def test_both_rails_rise_together_from_zero_under_watch(at: Bench) -> None:
    steps: list[tuple[float, SupplyState]] = []
    began = time.monotonic()
    state = at.client.supply_ramp(
        10.0, -10.0, 0.05, 1.0, None, WATCH, lambda share, state: steps.append((share, state))
    ).result(10)
    assert time.monotonic() - began > 0.9
    assert (state.output_on, state.set_positive_v, state.set_negative_v, state.limit_a) == (True, 10.0, -10.0, 0.05)
    assert [pair for pair in volts_sent(at) if pair != (0.0, 0.0)] == [
        (2.5, -2.5), (5.0, -5.0), (7.5, -7.5), (10.0, -10.0),
    ]  # fmt: skip
    assert [share for share, _ in steps] == [0.25, 0.5, 0.75]
    assert [seen.set_positive_v for _, seen in steps] == [2.5, 5.0, 7.5]
    order = [message.split()[0] for message in at.supply.messages() if re.match(r"(OUTP|VOLT|CURR) ", message)]
    assert order.index("CURR") < order.index("OUTP"), "the limit before anything is on"
    protections = {message for message in at.supply.messages() if message.startswith("VOLT:PROT ")}
    assert len(protections) == 1, "the protection stands at one level all the way"
    assert (state.protection_positive_v, state.protection_negative_v) == (12.0, 12.0)
    at.supply.load_ohm = 400.0
    assert at.supply.wait_off(1.0), "the watch goes on after the ramp"


def test_a_ramp_of_rails_that_are_on_begins_where_they_are(at: Bench) -> None:
    at.client.supply_set(4.0, -4.0, 0.05, True).result(5)
    sent = len(volts_sent(at))
    at.client.supply_ramp(8.0, -8.0, 0.05, 0.5, None, WATCH).result(10)
    assert volts_sent(at)[sent:] == [(6.0, -6.0), (8.0, -8.0)]
    assert [on for _, on in at.supply.on_at].count(False) == 0


def test_a_step_above_the_line_ends_the_ramp_with_off(at: Bench) -> None:
    """1 kohm at 6 V is beyond 5 mA: the rails never see the end of the way."""
    lines = WatchLines(positive_a=0.005, own_interval_s=0.05)
    future = at.client.supply_ramp(20.0, -20.0, 0.05, 2.0, None, lines)
    with pytest.raises(InstrumentError):
        future.result(10)
    assert at.supply.wait_off(1.0)
    wait_until(lambda: at.kept() == ["noted", "tripped", "output off"])
    assert max(positive for positive, _ in volts_sent(at)) <= 7.5
    sent = len(volts_sent(at))
    time.sleep(0.6)
    assert len(volts_sent(at)) == sent, "nothing of it is done afterwards"
    assert not at.supply.is_on


def test_off_in_the_middle_of_a_ramp(at: Bench) -> None:
    future = at.client.supply_ramp(20.0, -20.0, 0.05, 3.0, None, WATCH)
    wait_until(lambda: max((positive for positive, _ in volts_sent(at)), default=0.0) > 3.0)
    began = time.monotonic()
    off = at.client.off("pressed")
    assert at.supply.wait_off(1.0)
    assert at.supply.off_time() - began < 0.3
    assert off.result(5).confirmed
    with pytest.raises(InstrumentError, match="switched off"):
        future.result(5)
    time.sleep(0.6)
    assert not at.supply.is_on


def test_a_supply_that_is_lost_in_a_ramp(at: Bench) -> None:
    future = at.client.supply_ramp(20.0, -20.0, 0.05, 3.0, None, WATCH)
    wait_until(lambda: max((positive for positive, _ in volts_sent(at)), default=0.0) > 3.0)
    at.supply.close()
    with pytest.raises(InstrumentError):
        future.result(15)
    at.wait_for(OutputOff, 15)
    off = at.events()[-1]
    assert isinstance(off, OutputOff)
    assert not off.confirmed
    assert "switch it off by hand" in off.how


def test_one_thing_at_a_time(at: Bench) -> None:
    future = at.client.supply_ramp(10.0, -10.0, 0.05, 1.0, None, WATCH)
    for other in (
        at.client.supply_set(5.0, -5.0, 0.05, True),
        at.client.supply_ramp(5.0, -5.0, 0.05, 1.0, None, WATCH),
    ):
        with pytest.raises(InstrumentError, match="on their way"):
            other.result(5)
    assert future.result(10).set_positive_v == 10.0


def test_a_ramp_does_not_bring_back_rails_of_whose_off_nobody_knows(at: Bench) -> None:
    at.client.off("x").result(5)
    with pytest.raises(InstrumentError, match="without knowing"):
        at.client.supply_ramp(5.0, -5.0, 0.05, 0.0).result(5)
    assert volts_sent(at) == []


def test_only_one_output_that_is_on_is_no_beginning(at: Bench) -> None:
    at.supply.on[1] = True
    with pytest.raises(InstrumentError, match="Only one"):
        at.client.supply_ramp(5.0, -5.0, 0.05, 0.5).result(5)
    assert at.supply.wait_off(1.0)


# -- the watch ------------------------------------------------------------------------------------------------------


def test_a_rail_beyond_its_voltage_trips(at: Bench) -> None:
    lines = WatchLines(positive_v=6.0, own_interval_s=0.05)
    at.client.supply_ramp(5.0, -5.0, 0.05, 0.0, (20.0, 20.0), lines).result(5)
    time.sleep(0.2)
    assert at.supply.is_on
    at.supply.volts[1] = 8.0
    assert at.supply.wait_off(1.0)
    at.wait_for(OutputOff)
    tripped = at.events()[0]
    assert isinstance(tripped, Tripped)
    assert (tripped.what, tripped.value, tripped.limit) == ("rail+", 8.0, 6.0)


def test_a_protection_of_the_supply_that_trips_takes_both_off(at: Bench) -> None:
    at.client.supply_ramp(5.0, -5.0, 0.05, 0.0, (7.0, 7.0), WatchLines(grace_s=60.0, own_interval_s=0.05)).result(5)
    assert at.supply.is_on
    at.supply.volts[2] = 9.0
    assert at.supply.wait_off(1.0)
    at.wait_for(OutputOff)
    tripped = at.events()[0]
    assert isinstance(tripped, Tripped)
    assert tripped.what in ("negative protection", "negative output")


def test_a_supply_that_is_silent_while_watched_is_switched_off_before_its_time_outs(at: Bench) -> None:
    at.client.supply_ramp(5.0, -5.0, 0.05, 0.0, None, WatchLines(own_interval_s=0.05)).result(5)
    with beats(at.client):
        began = time.monotonic()
        at.supply.fault = lambda connection, message: "?" in message
        assert at.supply.wait_off(5.0)
        assert at.supply.off_time() - began < 3.5
        at.wait_for(OutputOff, 8.0)
        lost = at.events()[0]
        assert isinstance(lost, ContactLost)
        assert lost.who == "the supply"
    at.supply.fault = None


def test_a_watch_needs_no_heartbeat_to_trip(at: Bench) -> None:
    at.client.supply_ramp(5.0, -5.0, 0.05, 0.0, None, WATCH).result(5)
    at.supply.load_ohm = 100.0
    assert at.supply.wait_off(1.0)


def test_a_look_that_is_asked_for_does_not_end_the_grace_early(at: Bench) -> None:
    at.supply.load_ohm = 50.0
    at.client.supply_ramp(5.0, -5.0, 0.05, 0.0, None, WatchLines(grace_s=1.0, own_interval_s=5.0)).result(5)
    assert at.client.sample(1e6).result(5).in_limit
    time.sleep(0.2)
    assert at.supply.is_on, "the asker's clock began elsewhere"
    time.sleep(1.0)
    at.client.sample(0.0).result(5)
    assert at.supply.wait_off(1.0)


# -- the meter ------------------------------------------------------------------------------------------------------


def minded(at: Bench, limit_s: float = 0.5) -> None:
    """The rails up, the screw turned by readings that come quickly."""
    at.client.supply_ramp(5.0, -5.0, 0.05, 0.0, None, WatchLines(own_interval_s=0.1)).result(5)
    at.client.mind_meter(limit_s).result(5)
    for _ in range(3):
        at.client.read("dc volts").result(5)
    assert at.supply.is_on


def test_a_meter_that_is_unplugged_while_a_watch_depends_on_it(at: Bench) -> None:
    minded(at)
    began = time.monotonic()
    at.meter.close()
    with pytest.raises(InstrumentError):
        at.client.read("dc volts").result(5)
    assert at.supply.wait_off(1.0)
    assert at.supply.off_time() - began < 1.0
    at.wait_for(OutputOff)
    lost, off = at.events()
    assert isinstance(lost, ContactLost)
    assert lost.who == "the meter"
    assert isinstance(off, OutputOff)
    assert off.confirmed
    wait_until(lambda: at.kept() == ["noted", "contact lost", "output off"])


def test_a_meter_that_says_nothing_while_a_watch_depends_on_it(at: Bench) -> None:
    minded(at)
    at.meter.fault = lambda connection, message: True
    began = time.monotonic()
    at.client.read("dc volts")
    assert at.supply.wait_off(2.0)
    assert 0.4 < at.supply.off_time() - began < 1.0
    at.wait_for(OutputOff)
    lost = at.events()[0]
    assert isinstance(lost, ContactLost)
    assert "has not answered, and a watch depended on it" in lost.problem


def test_a_meter_that_nothing_depends_on_any_more_may_go(at: Bench) -> None:
    minded(at, 0.2)
    at.client.mind_meter(None).result(5)
    at.meter.close()
    with pytest.raises(InstrumentError):
        at.client.read("dc volts").result(5)
    time.sleep(1.5)
    assert at.supply.is_on
    assert at.events() == []


def test_minding_the_meter_does_not_start_the_grace_anew(at: Bench) -> None:
    at.supply.load_ohm = 50.0
    at.client.supply_ramp(5.0, -5.0, 0.05, 0.0, None, WatchLines(grace_s=0.6, own_interval_s=0.05)).result(5)
    began = time.monotonic()
    while at.supply.is_on and time.monotonic() - began < 3.0:
        at.client.mind_meter(5.0).result(5)
        time.sleep(0.05)
    assert not at.supply.is_on
    assert at.supply.off_time() - began < 1.5


# -- what was confirmed ---------------------------------------------------------------------------------------------


def test_a_confirmed_off_stays_confirmed_when_the_supply_goes_silent(tmp_path: Path) -> None:
    with bench(tmp_path) as at:
        at.connect()
        at.client.supply_set(5.0, -5.0, 0.05, True).result(5)
        assert at.client.off("pressed").result(5).confirmed
        at.supply.close()
        again = at.client.off("and once more").result(10)
        assert again.confirmed
        assert "confirmed before, and nothing was switched on since" in again.how
        off = at.client.close()
        assert off is not None
        assert off.confirmed


def comes_on_by_itself(at: Bench) -> None:
    at.connect()
    at.client.supply_set(5.0, -5.0, 0.05, True).result(5)
    assert at.client.off("pressed").result(5).confirmed
    at.supply.on.update({1: True, 2: True})


@pytest.mark.parametrize("who", ["asked", "watch"])
def test_a_supply_that_was_seen_on_since_is_unknown_when_it_goes_silent(tmp_path: Path, who: str) -> None:
    with bench(tmp_path) as at:
        comes_on_by_itself(at)
        if who == "asked":
            assert at.client.supply_state().result(5).output_on
        else:
            at.client.sample(0.0).result(5)
        at.supply.close()
        again = at.client.off("and once more").result(10)
        assert not again.confirmed
        assert "output state unknown: switch it off by hand" in again.how


@pytest.mark.parametrize("said", ["outputs", "current"])
def test_a_supply_that_says_on_and_then_loses_its_link_is_unknown(tmp_path: Path, said: str) -> None:
    """It ignores "off", answers one look, and says nothing from then on."""
    with bench(tmp_path) as at:
        comes_on_by_itself(at)
        looks: list[str] = []

        def fault(connection: socket.socket, message: str) -> bool:
            if "OUTP OFF" in message or looks:
                return True
            looks.append(message)
            if said == "current":
                connection.sendall(b"0,0;+3.0E-01,+3.0E-01;5.0,5.0\n")
            return said == "current"

        at.supply.fault = fault
        again = at.client.off("and once more").result(10)
        assert looks
        assert looks[0].startswith("OUTP?")
        assert at.supply.is_on
        assert not again.confirmed
        assert "output state unknown: switch it off by hand" in again.how


# -- settings under watch --------------------------------------------------------------------------------------------


def test_a_step_that_takes_too_long_is_no_hiding_place(at: Bench) -> None:
    """Each answer comes just inside its time-out: the watch would see nothing for ten seconds and more."""
    future = at.client.supply_ramp(20.0, -20.0, 0.05, 3.0, None, WATCH)
    wait_until(lambda: max((positive for positive, _ in volts_sent(at)), default=0.0) > 3.0)

    def late(connection: socket.socket, message: str) -> bool:
        time.sleep(0.9 if at.supply.is_on else 0.0)
        return False

    at.supply.fault = late
    began = time.monotonic()
    assert at.supply.wait_off(15.0)
    assert at.supply.off_time() - began < 2 * SETTING_S + SUPPLY_AGE_S, "the step it began in, then one whole one"
    with pytest.raises(InstrumentError):
        future.result(15)
    at.wait_for(OutputOff, 10)
    lost = at.events()[0]
    assert isinstance(lost, ContactLost)
    assert lost.who == "the supply"
