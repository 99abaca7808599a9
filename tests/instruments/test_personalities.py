"""Deviating dialects over real links: files only, no code, and the same rules as for the standard one."""

from __future__ import annotations

import sys
import tomllib
from collections.abc import Callable, Iterator

import pytest

from benchkit.errors import InstrumentError
from benchkit.instruments.link import Link
from benchkit.instruments.meter import Meter
from benchkit.instruments.profile import meter_profile, supply_profile
from benchkit.instruments.supply import Supply
from benchkit.instruments.traffic import TrafficLog
from tests.instruments.personalities import (
    Host,
    Line,
    NumberedSupply,
    PlainSupply,
    SelectSupply,
    SerialMeter,
    TogetherSupply,
    TwoRails,
)
from tests.keeper.helpers import wait_until

pytestmark = pytest.mark.skipif(sys.platform == "win32", reason="pseudo-terminals are POSIX")

Made = tuple[Supply, TwoRails]

KINDS: dict[str, tuple[type[TwoRails], type[Host | Line], str]] = {
    "select": (SelectSupply, Host, "select-supply"),
    "plain": (PlainSupply, Line, "plain-supply"),
    "together": (TogetherSupply, Host, TogetherSupply.profile),
    "numbered": (NumberedSupply, Host, NumberedSupply.profile),
}


@pytest.fixture
def make() -> Iterator[Callable[[str], Made]]:
    opened: list[Link | Host | Line] = []

    def made(kind: str, load_ohm: float = 1000.0) -> Made:
        personality, host, text = KINDS[kind]
        rails = personality(load_ohm)
        served = host(rails)
        profile = supply_profile(tomllib.loads(text) if "\n" in text else text)
        if kind == "together":
            table = tomllib.loads(text)
            profile = supply_profile({**table, "numbers": {"units": {"V": "1 V", "A": "1 A"}}})
        link = Link("the supply", served.address, profile.link.settings(), TrafficLog())
        opened.extend((link, served))
        supply = Supply(link, profile)
        supply.identify().result(20)
        rails.heard.clear()
        return supply, rails

    yield made
    for one in opened:
        one.close()


@pytest.mark.parametrize("kind", KINDS)
def test_set_sample_off(make: Callable[..., Made], kind: str) -> None:
    supply, rails = make(kind)
    sample = supply.set(5.0, -6.0, 0.05, True).result(20)
    assert sample.outputs == (True, True)
    assert (sample.state.positive_v, sample.state.negative_v) == (5.0, -6.0)
    assert (sample.state.set_positive_v, sample.state.set_negative_v, sample.state.limit_a) == (5.0, -6.0, 0.05)
    if kind != "numbered":
        assert (sample.state.positive_a, sample.state.negative_a) == (0.005, 0.006)
    assert not sample.state.in_limit
    assert (rails.volts, rails.limit) == ({1: 5.0, 2: 6.0}, {1: 0.05, 2: 0.05})
    assert supply.sample().result(20) == sample
    outcome = supply.off().result(20)
    assert outcome.confirmed, outcome.how
    assert not any(rails.on.values())


@pytest.mark.parametrize("kind", ["select", "plain", "together"])
def test_an_output_in_its_limit_is_seen(make: Callable[..., Made], kind: str) -> None:
    supply, rails = make(kind, 100.0)
    state = supply.set(2.0, -6.0, 0.03, True).result(20).state
    assert (state.positive_in_limit, state.negative_in_limit) == (False, True)
    rails.load_ohm = 10.0
    assert supply.sample().result(20).state.positive_in_limit


@pytest.mark.parametrize(
    ("kind", "deaf"), [("select", "CURR 0"), ("plain", "I2 "), ("together", r"APPL CH2,0.0000,0.0500")]
)
def test_a_limit_that_was_not_taken_raises_no_voltage(make: Callable[..., Made], kind: str, deaf: str) -> None:
    supply, rails = make(kind)
    rails.deaf = deaf
    with pytest.raises(InstrumentError, match="as sent"):
        supply.set(5.0, -5.0, 0.05, True).result(20)
    assert rails.volts == {1: 0.0, 2: 0.0}
    assert not any(rails.on.values())


@pytest.mark.parametrize("kind", ["together", "numbered"])
def test_outputs_with_switches_of_their_own_come_on_at_no_volts(make: Callable[..., Made], kind: str) -> None:
    supply, rails = make(kind)
    supply.set(5.0, -5.0, 0.05, True).result(20)
    assert rails.switched_at == [(1, 0.0), (2, 0.0)]


@pytest.mark.parametrize("kind", ["together", "numbered"])
def test_one_output_alone_takes_both_off(make: Callable[..., Made], kind: str) -> None:
    supply, rails = make(kind)
    rails.deaf = r"OUTP CH2,ON|OUT2 ON"
    with pytest.raises(InstrumentError, match=r"positive on, negative off|measures 0\.00 V"):
        supply.set(5.0, -5.0, 0.05, True).result(20)
    assert not any(rails.on.values())
    rails.deaf = ""
    supply.set(5.0, -5.0, 0.05, True).result(20)
    rails.on[1] = False
    assert supply.sample().result(20).outputs == (False, True)
    wait_until(lambda: not any(rails.on.values()))


def test_a_setting_that_is_not_read_back_is_judged_by_what_is_measured(make: Callable[..., Made]) -> None:
    supply, rails = make("numbered")
    rails.deaf = "CH2:VOLT 5"
    with pytest.raises(InstrumentError, match=r"measures -?0\.00 V where 5\.00 V were set"):
        supply.set(5.0, -5.0, 0.05, True).result(20)
    assert not any(rails.on.values())


def test_the_right_output_is_asked_after_the_link_broke_behind_the_choice(make: Callable[..., Made]) -> None:
    supply, rails = make("select")
    supply.set(5.0, -6.0, 0.05, True).result(20)
    assert isinstance(rails, SelectSupply)
    answer = rails.answer
    broken: list[str] = []

    def forgets(message: str) -> str | None:
        if message == "VOLT?" and rails.selected == 2 and not broken:
            broken.append(message)
            rails.selected = 1
            raise OSError("the connection ends here")
        return answer(message)

    rails.answer = forgets  # type: ignore[method-assign]
    state = supply.sample().result(20).state
    assert broken
    assert (state.set_positive_v, state.set_negative_v) == (5.0, -6.0)


def test_a_trip_is_seen_takes_both_off_and_is_cleared_only_on_purpose(make: Callable[..., Made]) -> None:
    supply, rails = make("select")
    supply.set(5.0, -6.0, 0.05, True).result(20)
    rails.trip(2)
    rails.on[1] = True
    state = supply.sample().result(20).state
    assert (state.positive_tripped, state.negative_tripped) == (False, True)
    supply.off().result(20)
    with pytest.raises(InstrumentError, match="switched off the negative rail"):
        supply.set(5.0, -6.0, 0.05, True).result(20)
    assert "VOLT:PROT:CLE" not in rails.heard
    cleared = supply.clear_trip().result(20)
    assert not cleared.state.tripped
    assert rails.volts == {1: 0.0, 2: 0.0}
    assert not any(rails.on.values())
    assert supply.set(5.0, -6.0, 0.05, True).result(20).outputs == (True, True)


def test_half_a_number_that_only_silence_ends_is_none(make: Callable[..., Made]) -> None:
    supply, rails = make("plain")
    answer = rails.answer

    def cut(message: str) -> str | None:
        reply = answer(message)
        return reply if reply is None or message != "MU2?" else reply[:3]

    rails.answer = cut  # type: ignore[method-assign]
    with pytest.raises(InstrumentError, match="followed by its unit") as caught:
        supply.sample().result(30)
    assert caught.value.kind == "garbled"


@pytest.fixture
def metered() -> Iterator[tuple[Meter, SerialMeter]]:
    meter = SerialMeter()
    with Line(meter) as line:
        profile = meter_profile("serial-meter")
        link = Link("the meter", line.address, profile.link.settings(), TrafficLog())
        yield Meter(link, profile), meter
        link.close()


@pytest.mark.parametrize(
    ("function", "shows", "value"),
    [
        ("dc volts", "-12.345 mV", -0.012345),
        ("temperature", "31.5 C", 31.5),
        ("ohms", "OL", None),
    ],
)
def test_a_serial_meter_with_units(
    metered: tuple[Meter, SerialMeter], function: str, shows: str, value: float | None
) -> None:
    meter, behind = metered
    behind.shows = shows
    reading = meter.read(function).result(20)
    assert reading.overload == (value is None)
    assert reading.value == (None if value is None else pytest.approx(value))
    assert behind.heard[0] == "SYST:REM"


def test_a_reply_in_another_unit_is_no_reading(metered: tuple[Meter, SerialMeter]) -> None:
    meter, behind = metered
    behind.shows = "1.5 kohm"
    with pytest.raises(InstrumentError, match="one number in V") as caught:
        meter.read("dc volts").result(30)
    assert caught.value.kind == "garbled"


def test_a_meter_that_stays_on_another_function_is_not_believed(metered: tuple[Meter, SerialMeter]) -> None:
    meter, behind = metered
    behind.stuck = True
    with pytest.raises(InstrumentError, match="stands on 'DCV' although ohms was chosen"):
        meter.read("ohms").result(20)
    assert "VAL?" not in behind.heard


def test_several_samples_choose_the_function_once(metered: tuple[Meter, SerialMeter]) -> None:
    meter, behind = metered
    behind.shows = ["1.0 V", "2.0 V", "3.0 V"]
    reading = meter.read("dc volts", 10.0, 3).result(20)
    assert (reading.value, reading.values) == (2.0, (1.0, 2.0, 3.0))
    assert [message for message in behind.heard if message.startswith("FUN ")] == ["FUN DCV"]
    assert "RNG 10" in behind.heard
