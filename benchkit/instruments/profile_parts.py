"""The tables that profiles of meters and supplies have in common: link, serial line, numbers, times.

A *series* is one message, or a list of messages that are sent one after the other; the last may be a question.
"""

from __future__ import annotations

import datetime
from collections.abc import Mapping
from typing import Annotated, Any, Literal, Self

from pydantic import (
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Field,
    PlainValidator,
    Strict,
    model_validator,
)
from pydantic_core import PydanticCustomError

from benchkit.errors import BenchkitError
from benchkit.instruments.numbers import NumberRules
from benchkit.instruments.replies import ANY, VALUE, ReplyRules
from benchkit.instruments.settings import PURE_LIBRARY, LinkSettings, SerialLine
from benchkit.measure.readings import FUNCTIONS
from benchkit.quantities import parse

LONGEST_SERIES = 8


def mistake(key: str, found: Any, expected: str) -> PydanticCustomError:
    """Return what a check over several keys raises, at the key that it names."""
    return PydanticCustomError("together", "{expected}", {"key": key, "found": found, "expected": expected})


def is_message(value: Any) -> bool:
    """Whether a value is a message: printable ASCII, not empty."""
    return isinstance(value, str) and 0 < len(value) <= 200 and all(" " <= letter <= "~" for letter in value)


def series(value: Any) -> tuple[str, ...]:
    """Return a message, or a list of them, as a tuple; "" and [] are an empty one."""
    if value in ("", [], ()):
        return ()
    several = tuple(value) if isinstance(value, list | tuple) else (value,)
    bad = next((one for one in several if not is_message(one)), None)
    if len(several) > LONGEST_SERIES or not all(is_message(one) for one in several):
        raise PydanticCustomError(
            "series",
            "a message of printable ASCII characters, or a list of at most eight of them",
            {"found": value if bad is None else bad},
        )
    return several


def _needed(value: tuple[str, ...]) -> tuple[str, ...]:
    if not value:
        raise PydanticCustomError("series", "a message; this one can't be left empty", {"found": ""})
    return value


def _whole(value: Any) -> Any:
    if isinstance(value, bool) or not isinstance(value, int):
        raise PydanticCustomError("int_type", "a whole number without quotes")
    return value


def _number(value: Any) -> Any:
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise PydanticCustomError("float_type", "a number without quotes")
    return value


def _date(value: Any) -> Any:
    if isinstance(value, str):
        try:
            return datetime.date.fromisoformat(value)
        except ValueError:
            raise PydanticCustomError("date_type", "a date, such as 2031-05-01") from None
    if isinstance(value, datetime.datetime) or not isinstance(value, datetime.date):
        raise PydanticCustomError("date_type", "a date, such as 2031-05-01")
    return value


def _characters(value: Any, most: int) -> str:
    if not isinstance(value, str) or len(value) > most or not value.isascii():
        form = 'one character such as "\\n"' if most == 1 else 'one or two characters such as "\\r\\n"'
        raise PydanticCustomError("termination", form, {"found": value})
    return value


def _sync(value: Any) -> str:
    if value == "" or (is_message(value) and value.count("{n}") == 1 and "?" in value):
        return str(value)
    raise PydanticCustomError(
        "sync", 'a question with {n} once, such as "*ESE {n};*ESE?"; or "" if there is none', {"found": value}
    )


Series = Annotated[tuple[str, ...], PlainValidator(series)]
NeededSeries = Annotated[tuple[str, ...], PlainValidator(lambda value: _needed(series(value)))]
Text = Annotated[str, Strict()]
Yes = Annotated[bool, Strict()]
Whole = Annotated[int, BeforeValidator(_whole)]
Format = Annotated[Literal[1], BeforeValidator(_whole)]
Number = Annotated[float, BeforeValidator(_number), Field(allow_inf_nan=False)]
Date = Annotated[datetime.date, BeforeValidator(_date)]
Seconds = Annotated[Number, Field(ge=0.0, le=600.0)]
Positive = Annotated[Number, Field(gt=0.0)]
Words = Annotated[tuple[Text, ...], Field(max_length=40)]


class Part(BaseModel):
    """A table whose keys are all known."""

    model_config = ConfigDict(extra="forbid", frozen=True)


def _stop_bits(value: Any) -> float:
    if isinstance(value, bool) or value not in {1, 1.5, 2}:
        raise PydanticCustomError("stop_bits", "1, 1.5 or 2", {"found": value})
    return float(value)


StopBits = Annotated[float, PlainValidator(_stop_bits)]


class LinePart(Part):
    """``[link.line]``: a serial line."""

    baud: Annotated[Whole, Field(ge=50, le=4_000_000)] = 9600
    data_bits: Literal[5, 6, 7, 8] = 8
    parity: Literal["none", "odd", "even"] = "none"
    stop_bits: StopBits = 1
    flow: Literal["none", "rts/cts", "xon/xoff", "dtr/dsr"] = "none"
    dtr: Yes = True
    rts: Yes = True


class LinkPart(Part):
    """``[link]``: terminations, times (s), what is sent after opening, how the link gets back into step."""

    read_termination: Annotated[str, PlainValidator(lambda value: _characters(value, 1))] = "\n"
    write_termination: Annotated[str, PlainValidator(lambda value: _characters(value, 2))] = "\n"
    timeout_s: Seconds = 2.0
    open_timeout_s: Seconds = 3.0
    gap_s: Annotated[Number, Field(ge=0.0, le=1.0)] = 0.0
    settle_s: Annotated[Number, Field(ge=0.0, le=10.0)] = 0.0
    sync: Annotated[str, PlainValidator(_sync)] = "*ESE {n};*ESE?"
    ends_by_idle_s: Annotated[Number, Field(ge=0.0, le=5.0)] = 0.0
    lock_timeout_s: Annotated[Number, Field(ge=0.0, le=60.0)] = 0.0
    line: LinePart = LinePart()
    prepare: Series = ()

    @model_validator(mode="after")
    def _ended(self) -> Self:
        if not self.read_termination and not self.ends_by_idle_s:
            raise mistake("read_termination", "", 'what ends a reply, such as "\\n"; or ends_by_idle_s')
        return self

    def settings(self, library: str = PURE_LIBRARY) -> LinkSettings:
        """Return them as the link takes them.

        Parameters
        ----------
        library : str
            The VISA library that the instrument is reached through.
        """
        plain = self.model_dump(exclude={"line"})
        return LinkSettings(**plain, line=SerialLine(**self.line.model_dump()), library=library or PURE_LIBRARY)


def _units(value: Any) -> dict[str, str]:
    """Return units as a table: a list means that each is the base unit itself, whatever is measured."""
    if isinstance(value, list | tuple):
        value = {name: "" for name in value}
    if not isinstance(value, dict):
        raise PydanticCustomError("units", 'a table, such as { mV = "1 mV", V = "1 V" }', {"found": value})
    for name, worth in value.items():
        letters = isinstance(name, str) and name and name[0] not in "0123456789+-., ;" and " " not in name
        if not letters or not isinstance(worth, str):
            raise PydanticCustomError(
                "units", 'units as they come and their worth, such as mV = "1 mV"', {"found": name}
            )
        if worth and not _worths(worth):
            raise PydanticCustomError("units", 'a quantity, such as "1 mV", "1 kohm", "1 degC"', {"found": worth})
    return dict(value)


def _worths(worth: str) -> dict[str, float]:
    found: dict[str, float] = {}
    for unit in dict.fromkeys(FUNCTIONS.values()):
        if worth.strip() and worth.strip()[-1] not in "0123456789":
            try:
                found[unit] = parse(worth, unit)
            except BenchkitError:
                continue
    return {unit: value for unit, value in found.items() if value > 0.0}


def _form(value: Any) -> str:
    if not is_message(value) or value.count(VALUE) != 1 or "}{" in value:
        raise PydanticCustomError(
            "form", "what stands around the number: {value} once, and {any} with something between", {"found": value}
        )
    if set(value.replace(VALUE, "").replace(ANY, "")) & set("{}"):
        raise PydanticCustomError("form", "no other braces than {value} and {any}", {"found": value})
    return str(value)


ReplyForm = Annotated[str, PlainValidator(_form)]


class NumbersPart(Part):
    """``[numbers]``: what stands around a number, its units, and how overload is said."""

    overload_from: Positive = 9.0e37
    overload_values: tuple[Positive, ...] = ()
    overload_words: Words = tuple(NumberRules.overload_words)
    units: Annotated[dict[str, str], PlainValidator(_units)] = {}
    unit_needed: Yes = False
    digits_after_point: Annotated[Whole, Field(ge=1, le=12)] | None = None
    reply: ReplyForm = VALUE

    def rules(self, unit: str) -> ReplyRules:
        """Return them as the reader of values in `unit` takes them."""
        worth = {name: _worths(quantity) if quantity else {unit: 1.0} for name, quantity in self.units.items()}
        return ReplyRules(
            numbers=NumberRules(
                overload_from=self.overload_from,
                overload_words=frozenset(word.upper() for word in self.overload_words),
            ),
            unit=unit,
            factors={name: factors[unit] for name, factors in worth.items() if unit in factors},
            form=self.reply,
            unit_needed=self.unit_needed,
            digits_after_point=self.digits_after_point,
            overload_values=self.overload_values,
        )


def demand_ends(link: LinkPart, numbers: NumbersPart) -> None:
    """Refuse replies that end by silence alone: a number that was cut short would pass for a whole one."""
    if not link.read_termination and not (numbers.unit_needed or numbers.digits_after_point):
        raise mistake(
            "numbers.unit_needed",
            "nothing",
            "unit_needed or digits_after_point, because nothing but silence ends a reply and half a number is one too",
        )


class TimingPart(Part):
    """``[timing]``: how long one reading may take."""

    mains_hz: Annotated[Number, Field(ge=40.0, le=440.0)] = 50.0
    power_line_cycles: Positive = 10.0
    cycles: Mapping[str, Positive] = {}
    autozero: Yes = True
    settling_s: Seconds = 0.5
    ac_settling_s: Seconds = 7.0
    settling: Mapping[str, Seconds] = {}
    autorange_s: Seconds = 1.0
    switch_s: Annotated[Number, Field(ge=0.0, le=10.0)] = 0.0

    def integration_s(self, function: str) -> float:
        """How long the meter integrates for one value, s."""
        cycles = self.cycles.get(function, self.power_line_cycles)
        return cycles / self.mains_hz * (2.0 if self.autozero else 1.0)

    def settled_s(self, function: str) -> float:
        """How long the meter's filter needs, s."""
        return self.settling.get(function, self.ac_settling_s if function == "ac volts" else self.settling_s)

    def timeout_s(self, function: str, *, ranged: bool = False) -> float:
        """Return the time-out for one value, s: twice the integration, settling, autorange and 1 s in reserve."""
        autorange_s = 0.0 if ranged else self.autorange_s
        return 2.0 * self.integration_s(function) + self.settled_s(function) + autorange_s + 1.0

    def expected_s(self, function: str, *, ranged: bool = False, samples: int = 1) -> float:
        """Return how long a reading of so many values is likely to take at most, s: for a countdown."""
        autorange_s = 0.0 if ranged else self.autorange_s
        return samples * (self.integration_s(function) + self.settled_s(function)) + autorange_s + self.switch_s
