"""The message language: one table of messages, and properties that hold for any text."""

from __future__ import annotations

import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit.rehearsal.scpi import (
    QUEUE_LENGTH,
    Arguments,
    Channels,
    Instrument,
    Number,
    Parameter,
    Quoted,
    ScpiError,
    Unit,
    Word,
    nr3,
    parse,
    spellings,
)


class Echo(Instrument):
    """A small instrument whose replies show what reached it."""

    def __init__(self) -> None:
        super().__init__("Maker,Model,Serial,1.0")
        self.level = 0.0
        self.resets = 0
        self.on("[SOURce]:VOLTage[:LEVel]", self._set)
        self.on("[SOURce]:VOLTage[:LEVel]?", lambda _: nr3(self.level))
        self.on("MEASure:VOLTage?", self._channels)
        self.on("MEASure:CURRent?", lambda arguments: "I" + self._channels(arguments))

    def reset(self) -> None:
        self.resets += 1

    def _set(self, arguments: Arguments) -> None:
        level = arguments.number("V", 0.0, 60.0)
        arguments.end()
        self.level = level

    def _channels(self, arguments: Arguments) -> str:
        return ",".join(str(number) for number in arguments.channels(4))


def number(text: str) -> Number:
    (unit,) = parse(f"X {text}")
    (parameter,) = unit.parameters
    assert isinstance(parameter, Number)
    return parameter


# Number forms: IEEE 488.2, 7.7.2 (flexible listening), as the check values list them.
@pytest.mark.parametrize(
    ("text", "value"),
    [("42", 42.0), ("-42", -42.0), ("+1", 1.0), (".1234", 0.1234), ("1.", 1.0), ("1.0005E+3", 1000.5),
     ("-99.123E-1", -9.9123), ("1e3", 1000.0), ("1 E 3", 1000.0), ("-5.123456789", -5.123456789)],
)  # fmt: skip
def test_numbers_are_listened_to_tolerantly(text: str, value: float) -> None:
    assert number(text).value == pytest.approx(value, rel=1e-15)


@pytest.mark.parametrize(
    ("message", "units"),
    [
        ("*IDN?", [Unit(("*IDN",), True, ())]),
        ("  *rst  ", [Unit(("*RST",), False, ())]),
        ("VOLT 5", [Unit(("VOLT",), False, (Number(5.0),))]),
        ("volt\t5 mV", [Unit(("VOLT",), False, (Number(5.0, "MV"),))]),
        ("MEAS:VOLT? (@1,2)", [Unit(("MEAS", "VOLT"), True, (Channels((1, 2)),))]),
        ("OUTP ON,(@1:3)", [Unit(("OUTP",), False, (Word("ON"), Channels((1, 2, 3))))]),
        ("OUTP ON , ( @ 3 : 1 )", [Unit(("OUTP",), False, (Word("ON"), Channels((3, 2, 1))))]),
        ('DISP "a;b ""c"""', [Unit(("DISP",), False, (Quoted('a;b "c"'),))]),
        ("A:B 1;C 2", [Unit(("A", "B"), False, (Number(1.0),)), Unit(("A", "C"), False, (Number(2.0),))]),
        ("A:B 1;:C 2", [Unit(("A", "B"), False, (Number(1.0),)), Unit(("C",), False, (Number(2.0),))]),
        ("A:B?;*OPC?;C?", [Unit(("A", "B"), True, ()), Unit(("*OPC",), True, ()), Unit(("A", "C"), True, ())]),
        ("", []),
        ("   ", []),
    ],
)
def test_messages(message: str, units: list[Unit]) -> None:
    assert list(parse(message)) == units


@pytest.mark.parametrize(
    ("message", "code"),
    [
        ("VOLT 5\x00", -101), ("VOLT 5\u00b5", -101), ("5 VOLT", -102), ("VOLT:", -102), ("VOLT;;VOLT", -102),
        ("VOLT,5", -103), ("VOLT 5,", -109), ("VOLT +", -120), ("VOLT 1.2.3", -120), ("VOLT 1e999", -222),
        ("ABCDEFGHIJKLM 1", -112), ('DISP "open', -151), ("MEAS? (@", -170), ("MEAS? (@1,,2)", -170),
        ("MEAS? (@x)", -170), ("MEAS? (@1)2)", -102), ("MEAS? (@100)", -222), ("VOLT @5", -102),
    ],
)  # fmt: skip
def test_malformed_messages_name_their_error(message: str, code: int) -> None:
    with pytest.raises(ScpiError) as caught:
        list(parse(message))
    assert caught.value.code == code


def test_what_stands_before_a_mistake_has_happened() -> None:
    echo = Echo()
    assert echo.handle("VOLT 3;VOLT?;NONSENSE 1;VOLT 9") == "+3.00000000E+00"
    assert echo.level == 3.0
    assert echo.handle("SYST:ERR?") == '-113,"Undefined header"'
    assert echo.handle("SYST:ERR?") == '0,"No error"'


@pytest.mark.parametrize("header", ["VOLT", "volt", "VOLTage", "SOUR:VOLT", "SOURCE:VOLTAGE:LEVEL", ":volt:lev"])
def test_long_and_short_forms(header: str) -> None:
    echo = Echo()
    assert echo.handle(f"{header} 7") is None
    assert echo.level == 7.0


@pytest.mark.parametrize("header", ["VOL", "VOLTA", "VOLTAG", "VOLTAGES", "SOURC:VOLT", "VOLT1", "LEV:VOLT"])
def test_nothing_between_long_and_short(header: str) -> None:
    echo = Echo()
    echo.handle(f"{header} 7")
    assert echo.level == 0.0
    assert echo.handle("SYST:ERR?") == '-113,"Undefined header"'


@pytest.mark.parametrize(
    ("message", "code"),
    [
        ("VOLT", -109), ("VOLT 5,6", -108), ("VOLT ON", -224), ("VOLT 5 A", -131), ("VOLT -1", -222),
        ("VOLT 61", -222), ('VOLT "5"', -104), ("VOLT (@1)", -109), ("VOLT? 5", -108), ("*IDN? 1", -108),
        ("MEAS:VOLT? (@5)", -222), ("MEAS:VOLT? 1", -108), ("*IDN", -113), ("*ESE 256", -222),
    ],
)  # fmt: skip
def test_refused_units_change_nothing(message: str, code: int) -> None:
    echo = Echo()
    assert echo.handle(message) is None
    assert echo.level == 0.0
    reply = echo.handle("SYST:ERR?")
    assert reply is not None
    assert reply.startswith(f"{code},")


@pytest.mark.parametrize(
    ("text", "level"), [("5", 5.0), ("5V", 5.0), ("500 mV", 0.5), ("0.05kV", 50.0), ("MAX", 60.0), ("minimum", 0.0)]
)
def test_units_and_named_values(text: str, level: float) -> None:
    echo = Echo()
    echo.handle(f"VOLT {text}")
    assert echo.level == pytest.approx(level)


def test_replies_of_one_message_are_joined() -> None:
    assert Echo().handle("MEAS:VOLT? (@2);CURR? (@1,4);*OPC?") == "2;I1,4;1"


def test_error_queue_overflows_at_its_end() -> None:
    echo = Echo()
    for _ in range(QUEUE_LENGTH + 5):
        echo.handle("NONSENSE")
    entries = [echo.handle("SYST:ERR?") for _ in range(QUEUE_LENGTH + 1)]
    assert entries[0] == '-113,"Undefined header"'
    assert entries[QUEUE_LENGTH - 1] == '-350,"Queue overflow"'
    assert entries[QUEUE_LENGTH] == '0,"No error"'


def test_status_registers() -> None:
    # IEEE 488.2, 11.5.1: power on is bit 7, a command error bit 5, an execution error bit 4 of the event status.
    echo = Echo()
    assert echo.handle("*ESR?") == "128"
    echo.handle("NONSENSE")
    echo.handle("VOLT 99")
    echo.handle("*ESE 32;*SRE 32")
    assert echo.handle("*STB?") == str(4 + 32 + 64)
    assert echo.handle("*ESR?;*ESR?") == "48;0"
    echo.handle("NONSENSE;*CLS")  # the mistake ends its message: nothing is cleared
    assert echo.handle("*ESR?") == "32"
    echo.handle("NONSENSE")
    echo.handle("*CLS")
    assert echo.handle("*ESR?;:SYST:ERR?") == '0;0,"No error"'
    echo.handle("*RST")
    assert echo.resets == 1


def test_spellings_of_a_pattern() -> None:
    assert set(spellings("OUTPut[:STATe]")) == {
        ("OUTP",), ("OUTPUT",), ("OUTP", "STAT"), ("OUTPUT", "STAT"), ("OUTP", "STATE"), ("OUTPUT", "STATE"),
    }  # fmt: skip


# Talkers are strict: IEEE 488.2, 8.7.4.
NR3 = re.compile(r"[+-]\d\.\d{8}E[+-]\d{2,3}")


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_nr3_is_strict_and_close(value: float) -> None:
    text = nr3(value)
    assert NR3.fullmatch(text)
    assert float(text) == pytest.approx(value, rel=1e-8, abs=1e-320)


@given(st.text(max_size=60))
def test_any_text_is_answered_or_queued_never_raised(text: str) -> None:
    echo = Echo()
    reply = echo.handle(text)
    assert reply is None or (reply.isascii() and "\n" not in reply)


printable = st.text(st.characters(min_codepoint=32, max_codepoint=126), max_size=40)


@given(st.lists(st.sampled_from(["VOLT 1", "VOLT?", "*OPC?", ":MEAS:VOLT? (@1,2)", "bad", "VOLT 1 A"]), max_size=6))
def test_a_chain_is_its_units_one_by_one_up_to_the_first_mistake(pieces: list[str]) -> None:
    together, apart = Echo(), Echo()
    rooted = [piece if piece.startswith(("*", ":")) else f":{piece}" for piece in pieces]
    replies = []
    for piece in rooted:
        reply = apart.handle(piece)
        if reply is not None:
            replies.append(reply)
        if apart.handle("*STB?") == "4":
            break
    assert together.handle(";".join(rooted)) == (";".join(replies) or None)
    assert together.handle("SYST:ERR?") == apart.handle("SYST:ERR?")


@given(st.one_of(st.integers(-999, 999).map(float), st.floats(-1e6, 1e6)), st.sampled_from(["", " V", "mV", " KV"]))
def test_written_numbers_come_back(value: float, suffix: str) -> None:
    (unit,) = parse(f"X {value!r}{suffix}")
    parameters: tuple[Parameter, ...] = unit.parameters
    assert parameters == (Number(value, suffix.strip().upper()),)


@given(printable)
def test_quoted_text_comes_back(text: str) -> None:
    doubled = text.replace('"', '""')
    (unit,) = parse(f'X "{doubled}"')
    assert unit.parameters == (Quoted(text),)
