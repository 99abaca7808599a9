"""One hundred thousand replies: nothing but our own exception, and nothing taken for a number that isn't one.

The oracle is a second, strict reading (`fault_bench.oracle`).  Each reply goes to every parser, because a
link out of step brings any reply to any question.  Then a sample goes through real links, out of step and all.
"""

from __future__ import annotations

import random
from collections.abc import Callable, Sequence
from typing import Any

import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from benchkit.errors import InstrumentError
from benchkit.instruments.numbers import NumberRules, parse_flags, parse_number, parse_numbers, parse_switches
from benchkit.quantities import Overload
from tests.instruments.fault_bench import Act, Close, Say, Wait, mutations, oracle
from tests.instruments.fault_bench.bench import MeterBench, fault_meter

RULES = NumberRules()
VOLTS = NumberRules(units=("V", "VDC"))
SHARES = 4
REPLIES_A_SHARE = 25_000

PARSERS: tuple[tuple[str, Callable[[str], Any], Callable[[str], Any]], ...] = (
    ("one number", lambda text: parse_number(text, RULES), oracle.number),
    ("one number in volts", lambda text: parse_number(text, VOLTS), lambda text: oracle.number(text, VOLTS.units)),
    ("two numbers", lambda text: parse_numbers(text, 2, RULES), lambda text: oracle.numbers(text, 2)),
    ("two switches", lambda text: parse_switches(text, 2), lambda text: oracle.switches(text, 2)),
    ("two registers", lambda text: parse_flags(text, 2), lambda text: oracle.flags(text, 2)),
)


def _comparable(value: Any) -> Any:
    """Return a value so that an overload, and the sign of a zero, can be compared."""
    if isinstance(value, Overload):
        return "overload" if value.positive else "-overload"
    return repr(value)


def disagreement(text: str) -> str:
    """Return what a parser makes of a reply that the oracle reads differently, or nothing."""
    for what, parse, strict in PARSERS:
        expected = strict(text)
        try:
            got = parse(text)
        except InstrumentError as error:
            if error.kind != "garbled" or not error.message.isprintable() or not error.message.isascii():
                return f"{what}: {text!r} ended in {error.kind}: {error.message!r}"
            if expected is not None:
                return f"{what}: {text!r} was refused, and is {expected!r}"
            continue
        if expected is None or _comparable(got) != (expected if isinstance(expected, str) else repr(expected)):
            return f"{what}: {text!r} was taken for {got!r}, and is {expected!r}"
    return ""


def campaign(seed: int, count: int) -> tuple[list[str], int]:
    """Return what was read wrongly of so many replies, and how many were a value to at least one parser."""
    draw = random.Random(seed)
    wrong: list[str] = []
    values = 0
    for _ in range(count):
        text = mutations.reply(draw)
        values += any(strict(text) is not None for _, _, strict in PARSERS)
        found = disagreement(text)
        if found:
            wrong.append(found)
    return wrong, values


@pytest.mark.parametrize("share", range(SHARES))
def test_no_reply_is_taken_for_something_else(share: int) -> None:
    wrong, values = campaign(20_260 + share, REPLIES_A_SHARE)
    assert wrong[:10] == []
    # neither all sense nor all nonsense, or nothing would have been tried
    assert 0.15 < values / REPLIES_A_SHARE < 0.85


def talk(variant: str, seed: int, questions: int) -> tuple[list[str], int, int]:
    """Ask an instrument that garbles its answers; return what was believed wrongly, and how many were got and refused.

    Each question has its own number, and the instrument answers with that, garbled or not.  An answer may be believed
    when it is that number, or when the whole of a single line that was sent for *this* question says it: a digit that
    was changed on the way can't be seen.
    """
    draw = random.Random(seed)
    meter, server = fault_meter(variant)
    said: dict[str, list[str]] = {}

    def plan(message: str) -> Sequence[Act] | None:
        if not message.startswith("MEAS"):
            return None
        chance = draw.random()
        right = f"{float(message.split()[1]):+.6E}"
        text = right if chance < 0.6 else mutations.mutated(draw, right) if chance < 0.8 else mutations.reply(draw)
        said.setdefault(message, []).append(text)
        data = text.encode("latin-1")
        if chance > 0.99:
            return (Wait(0.09), Say(data + b"\n"))
        if chance > 0.98:
            return (Say(data, end=False),)
        if chance > 0.97 and variant != "serial":
            return (Close(data),)
        if chance > 0.95:
            return (Say(data + b"\n+12\n"),)
        return (Say(data + draw.choice([b"\n", b"\r\n"])),)

    wrong: list[str] = []
    got = refused = 0
    with server, MeterBench(server.address, {"timeout_s": 1.0}) as bench:
        bench.meter.identify().result(20)
        meter.plan = plan
        for number in range(1, questions + 1):
            question = f"MEAS:VOLT:DC? {number}"
            try:
                value = bench.start(number, 0.06, repeats=True).result(30)
            except InstrumentError:
                refused += 1
                continue
            got += 1
            said_for_it = [oracle.number(text) for text in said[question] if "\n" not in text]
            if _comparable(value) not in [one if isinstance(one, str) else repr(one) for one in said_for_it]:
                wrong.append(f"{question}: {value!r} was believed of {said[question]!r}")
        meter.plan = None
        if bench.read(17.0) != 17.0:
            wrong.append("the reading after all this was wrong")
    return wrong, got, refused


@pytest.mark.parametrize("variant", ["socket", "serial", "vxi-11", "hislip"])
def test_garbled_answers_over_a_real_link(variant: str) -> None:
    """A sample; ``python -m tests.benchmarks.garbled_answers`` asks thousands."""
    questions = 300
    wrong, got, refused = talk(variant, 4711, questions)
    assert wrong[:5] == []
    assert got > questions / 3
    assert refused > questions / 20


@given(st.text(st.characters(max_codepoint=255), max_size=40))
@example("\x1f1,0")
@example("+-OL")
@example("1\r,2")
@settings(max_examples=1000, deadline=None)
def test_any_bytes(text: str) -> None:
    assert disagreement(text) == ""


@given(st.from_regex(r"[ \r]*[+-]?[0-9]{0,3}\.?[0-9]{0,3}([eE][+-]?[0-9]{0,5})? ?[V,;]?[ \r]*", fullmatch=True))
@settings(max_examples=500, deadline=None)
def test_what_is_nearly_a_number(text: str) -> None:
    assert disagreement(text) == ""


@given(st.floats(allow_nan=False, allow_infinity=False, min_value=-8.4e37, max_value=8.4e37), st.integers(0, 16))
@settings(max_examples=500, deadline=None)
def test_what_is_written_is_what_is_read(value: float, digits: int) -> None:
    """Against Python's own formatting: neither parser nor oracle made these."""
    for text in (f"{value:+.{digits}E}", f"{value:.{digits}e}", f"{value:.{digits}f}", repr(value)):
        assert parse_number(text, RULES) == float(text)
        assert oracle.number(text) == float(text)


@pytest.mark.parametrize(
    ("reading", "expected"),
    [
        (oracle.number("+1.5E-3"), 0.0015),
        (oracle.number("9.91E37"), "overload"),
        (oracle.number("-OL"), "-overload"),
        (oracle.number("1,5"), None),
        (oracle.number("1.5 V"), None),
        (oracle.number("1.5 V", ("V",)), 1.5),
        (oracle.number("²"), None),
        (oracle.number("1.5\x00"), None),
        (oracle.numbers("1,-2", 2), (1.0, -2.0)),
        (oracle.numbers("1,9.9E37", 2), None),
        (oracle.switches("on,0", 2), (True, False)),
        (oracle.switches("2,0", 2), None),
        (oracle.flags("65535,+1", 2), (65535, 1)),
        (oracle.flags("65536,1", 2), None),
        (oracle.flags("-1,1", 2), None),
    ],
)
def test_the_oracle_itself(reading: object, expected: object) -> None:
    assert reading == expected
