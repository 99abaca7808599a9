"""Switching a supply off while its link fails: really off, or said to be unknown; never confirmed when it is on."""

from __future__ import annotations

import random
import time
from collections.abc import Iterator, Sequence

import pytest

from benchkit.errors import InstrumentError
from benchkit.instruments.supply import UNKNOWN
from tests.instruments.fault_bench import KINDS, Act, Close, FaultServer, FaultSupply, Reset, Say, SerialServer, Wait
from tests.instruments.fault_bench.bench import VARIANTS, SupplyBench, fault_meter, fault_supply

LONGEST_OFF_S = 6.0

At = tuple[FaultSupply, FaultServer, SupplyBench]


@pytest.fixture
def at(request: pytest.FixtureRequest) -> Iterator[At]:
    supply, server = fault_supply(request.param)
    with server, SupplyBench(server.address) as bench:
        assert bench.supply.identify().result(20) == supply.name
        sample = bench.supply.set(5.0, -5.0, 0.05, True).result(30)
        assert sample.outputs == (True, True)
        assert supply.is_on
        yield supply, server, bench


def switched_off(at: At) -> str:
    """Switch off, and return what was said; it is in time, and never confirms what isn't so."""
    supply, _, bench = at
    began = time.monotonic()
    outcome = bench.supply.off().result(60)
    assert time.monotonic() - began < LONGEST_OFF_S
    assert not (outcome.confirmed and supply.is_on), outcome.how
    assert outcome.confirmed or UNKNOWN in outcome.how
    assert outcome.how.isprintable()
    return "confirmed" if outcome.confirmed else "unknown"


@pytest.mark.parametrize("at", list(VARIANTS), indirect=True)
def test_off_is_off(at: At) -> None:
    assert switched_off(at) == "confirmed"
    assert not at[0].is_on


ONCE: dict[str, tuple[str, tuple[Act, ...]]] = {
    "the question for the state is not answered": ("OUTP?", ()),
    "its answer is late": ("OUTP?", (Wait(0.5), Say(b"1,1\n"))),
    "its answer is garbled": ("OUTP?", (Say(b"0,\xff\n"),)),
    "its answer has no end": ("OUTP?", (Say(b"0,0", end=False),)),
    "the link breaks then": ("OUTP?", (Close(),)),
    "the link breaks at off": ("OUTP OFF", (Close(),)),
}


@pytest.mark.parametrize("fault", list(ONCE))
@pytest.mark.parametrize("at", list(KINDS), indirect=True)
def test_off_gets_over_one_fault(at: At, fault: str) -> None:
    supply, server, _ = at
    begins, acts = ONCE[fault]
    supply.fails_once(begins, *acts)
    said = switched_off(at)
    if isinstance(server, SerialServer) and not server.present:
        assert said == "unknown"
        server.start()
        supply.plan = None
        assert switched_off(at) == "confirmed"
    else:
        assert said == "confirmed"
    assert not supply.is_on


@pytest.mark.parametrize("at", ["socket", "vxi-11", "hislip"], indirect=True)
def test_off_gets_over_a_reset(at: At) -> None:
    at[0].fails_once("OUTP OFF", Reset())
    assert switched_off(at) == "confirmed"
    assert not at[0].is_on


@pytest.mark.parametrize("at", list(KINDS), indirect=True)
def test_a_supply_that_has_gone_dumb_is_unknown(at: At) -> None:
    supply, _, _ = at
    supply.fails_always("")
    assert switched_off(at) == "unknown"
    assert any(message.startswith("OUTP OFF") for message in supply.messages())


@pytest.mark.parametrize("at", list(KINDS), indirect=True)
def test_a_supply_that_is_gone_is_unknown(at: At) -> None:
    _, server, bench = at
    server.stop()
    began = time.monotonic()
    outcome = bench.supply.off().result(60)
    assert time.monotonic() - began < LONGEST_OFF_S
    assert not outcome.confirmed
    assert UNKNOWN in outcome.how


@pytest.mark.parametrize("at", list(KINDS), indirect=True)
def test_a_supply_that_does_not_obey_is_not_said_to_be_off(at: At) -> None:
    supply, _, _ = at
    supply.fails_always("OUTP OFF")
    assert switched_off(at) == "unknown"
    assert supply.is_on


@pytest.mark.parametrize("at", list(VARIANTS), indirect=True)
def test_an_old_answer_that_says_off_confirms_nothing(at: At) -> None:
    """The supply does not obey, and what it said while it was off turns up late, just when off is to be confirmed."""
    supply, _, bench = at
    old = [(Wait(0.5), Say(b"0,0\n"), Say(b"0,0\n"), Say(b"0,0\n"), Say(b"0,0;0,0;0,0\n"))]

    def plan(message: str) -> Sequence[Act] | None:
        if message.startswith("OUTP OFF"):
            return ()
        return old.pop() if old and "?" in message else None

    supply.plan = plan
    looking = bench.supply.sample()
    time.sleep(0.1)
    assert switched_off(at) == "unknown"
    assert supply.is_on
    assert looking.exception(10) is not None


@pytest.mark.parametrize("at", list(KINDS), indirect=True)
def test_off_overtakes_a_look_at_the_supply_that_hangs(at: At) -> None:
    supply, _, bench = at
    hung = [1]

    def plan(message: str) -> Sequence[Act] | None:
        return () if message.startswith((":MEAS", "MEAS", "OUTP?")) and hung and hung.pop() else None

    supply.plan = plan
    looking = bench.supply.sample()
    deadline = time.monotonic() + 10.0
    while hung and time.monotonic() < deadline:
        time.sleep(0.002)
    began = time.monotonic()
    assert switched_off(at) == "confirmed"
    off_after_s = supply.off_time() - began
    assert off_after_s < 0.6
    assert isinstance(looking.exception(10), InstrumentError)


@pytest.mark.parametrize("kind", list(KINDS))
def test_a_meter_that_takes_seven_seconds_does_not_delay_off(kind: str) -> None:
    """Each instrument has its own thread; the meter is left in the middle of its reading."""
    meter, meter_server = fault_meter(kind)
    supply, supply_server = fault_supply(kind)
    from tests.instruments.fault_bench.bench import MeterBench

    with (
        meter_server,
        supply_server,
        SupplyBench(supply_server.address) as bench,
        MeterBench(meter_server.address) as at,
    ):
        at.meter.identify().result(20)
        bench.supply.set(5.0, -5.0, 0.05, True).result(30)
        meter.fails_always("MEAS", Wait(7.0), Say(b"+17\n"))
        reading = at.start(17.0, 10.0, repeats=False)
        time.sleep(0.1)
        began = time.monotonic()
        outcome = bench.supply.off().result(60)
        assert outcome.confirmed
        assert supply.off_time() - began < 0.5
        assert not reading.done()


@pytest.mark.parametrize(
    "variant", ["socket", "serial", "vxi-11, keeps what is unread", "hislip, answers without number"]
)
def test_a_supply_that_answers_when_it_likes_is_never_misread(variant: str) -> None:
    """Set, look, off, with answers late, lost or broken at random: a state that is told is the supply's own."""
    draw = random.Random(f"off {variant}")
    supply, server = fault_supply(variant)

    def plan(message: str) -> Sequence[Act] | None:
        chance = draw.random()
        if chance < 0.8:
            return None
        if chance < 0.9:
            reply = supply.reply(message)
            return (Wait(0.45), Say(reply.encode() + b"\n")) if reply else None
        return () if message.endswith("?") or "?" in message else None

    with server, SupplyBench(server.address) as bench:
        bench.supply.identify().result(20)
        supply.plan = plan
        told = 0
        for number in range(1, 3):
            volts = float(number)
            try:
                sample = bench.supply.set(volts, -volts, 0.05, True).result(60)
            except InstrumentError:
                continue
            told += 1
            assert sample.state.set_positive_v == volts
            assert sample.outputs == (True, True)
        supply.plan = plan
        outcome = bench.supply.off().result(60)
        assert not (outcome.confirmed and supply.is_on)
        supply.plan = None
        assert bench.supply.off().result(60).confirmed
        assert not supply.is_on
