"""How the values of a design file are read: quantities with their unit, sign and range, as pydantic field types.

A quantity is text ("1 kohm 1 %") or a TOML number in the base unit. What can't be read, or lies outside its range, is
refused with what came and what was expected; `benchkit.stage.design` adds the file and the key.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Annotated, Any, Literal, NamedTuple

from pydantic import AfterValidator, BeforeValidator, Field
from pydantic_core import PydanticCustomError

from benchkit.errors import EntryError
from benchkit.quantities import Tolerance, parse, parse_tolerance, quoted


class Rest(NamedTuple):
    """Where the output rests: a voltage, or a share of the span between the rails (the other one is None)."""

    volts: float | None
    share: float | None


class Feed(NamedTuple):
    """One of the two feeds of the spreader.

    Attributes
    ----------
    kind : str
        "source", "resistor" or "servo".
    value : Tolerance
        Amperes of a source, ohms of a resistor; (0, 0) for a servo.
    """

    kind: Literal["source", "resistor", "servo"]
    value: Tolerance


def _refuse(came: str, expected: str, next_step: str = "") -> PydanticCustomError:
    return PydanticCustomError("benchkit", "{came}", {"came": came, "expected": expected, "next_step": next_step})


def _as_text(value: object, unit: str) -> str:
    """TOML numbers are quantities in the base unit; anything but text and numbers is refused."""
    if isinstance(value, bool) or not isinstance(value, (str, int, float)):
        raise _refuse(f"{quoted(value)} came instead of a quantity", f'a quantity in {unit}, such as "1 {unit}"')
    return value if isinstance(value, str) else repr(value)


def _checked(read: Callable[[str, str], Any], value: object, unit: str) -> Any:
    try:
        return read(_as_text(value, unit), unit)
    except EntryError as error:
        raise _refuse(error.came, error.expected, error.next_step) from None


def _quantity(
    unit: str, *, above: float | None = None, least: float | None = None, most: float | None = None
) -> BeforeValidator:
    """Make a validator for a plain quantity within (above, most] or [least, most]."""

    def validate(value: object) -> float:
        number = float(_checked(parse, value, unit))
        _within(number, value, unit, above, least, most)
        return number

    return BeforeValidator(validate)


def _toleranced(unit: str, *, above: float = 0.0) -> BeforeValidator:
    """Make a validator for a marked value with a tolerance."""

    def validate(value: object) -> Tolerance:
        marked: Tolerance = _checked(parse_tolerance, value, unit)
        _within(marked.value, value, unit, above, None, None)
        return marked

    return BeforeValidator(validate)


def _within(
    number: float, shown: object, unit: str, above: float | None, least: float | None, most: float | None
) -> None:
    if above is not None and number <= above:
        raise _refuse(f"{quoted(str(shown))} came", f"more than {above:g} {unit}")
    if least is not None and number < least:
        raise _refuse(f"{quoted(str(shown))} came", f"{least:g} {unit} or more")
    if most is not None and number > most:
        raise _refuse(f"{quoted(str(shown))} came", f"{most:g} {unit} or less")


def _percent(value: object) -> float:
    """Read "10 %" as the fraction 0.1; the sign % must be there, because 0.1 and 10 are easily mistaken."""
    if not isinstance(value, str) or "%" not in value:
        raise _refuse(f"{quoted(value)} came", 'a percentage, such as "10 %"')
    number = float(_checked(parse, value, "%"))
    _within(number, value, "%", 0.0, None, 1000.0)
    return number / 100.0


def _feed(value: object) -> Feed:
    if value == "servo":
        return Feed("servo", Tolerance(0.0, 0.0))
    text = _as_text(value, "ohm")
    found: list[Feed] = []
    kinds: tuple[tuple[Literal["resistor", "source"], str], ...] = (("resistor", "ohm"), ("source", "A"))
    for kind, unit in kinds:
        try:
            found.append(Feed(kind, parse_tolerance(text, unit)))
        except EntryError:
            continue
    if len(found) != 1:
        why = "is neither" if not found else "could be either"
        raise _refuse(
            f"{quoted(text)} {why}",
            'a current such as "8 mA 5 %", a resistor such as "1 kohm 1 %", or "servo" (below only)',
        )
    _within(found[0].value.value, text, "ohm" if found[0].kind == "resistor" else "A", 0.0, None, None)
    return found[0]


def _rest(value: object) -> Rest:
    if isinstance(value, str) and "%" in value:
        share = float(_checked(parse, value, "%"))
        _within(share, value, "%", 0.0, None, 99.0)
        return Rest(None, share / 100.0)
    return Rest(float(_checked(parse, value, "V")), None)


def _printable(value: str) -> str:
    if not value.isprintable():
        raise _refuse(f"{quoted(value)} came", "a name of characters that can be printed")
    return value


def _below_all(value: float) -> float:
    if value >= 1.0:
        raise _refuse(f"{100.0 * value:g} % came", "less than 100 %, or the lower limit would be below nothing")
    return value


Text = Annotated[str, Field(min_length=1, max_length=200), AfterValidator(_printable)]
Volts = Annotated[float, _quantity("V")]
PositiveVolts = Annotated[float, _quantity("V", above=0.0)]
NegativeVolts = Annotated[float, _quantity("V", most=0.0)]
PositiveAmps = Annotated[float, _quantity("A", above=0.0)]
PositiveFarads = Annotated[float, _quantity("F", above=0.0)]
Celsius = Annotated[float, _quantity("degC", least=-55.0, most=200.0)]
KelvinPerWatt = Annotated[float, _quantity("K/W", least=0.0)]
JoulePerKelvin = Annotated[float, _quantity("J/K", above=0.0)]
PlainOhms = Annotated[float, _quantity("ohm", least=0.0)]
OffsetVolts = Annotated[float, _quantity("V", least=0.0)]
Seconds = Annotated[float, _quantity("s", least=0.0)]
PositiveWatts = Annotated[float, _quantity("W", above=0.0)]
Fraction = Annotated[float, BeforeValidator(_percent)]
TargetTolerance = Annotated[float, BeforeValidator(_percent), AfterValidator(_below_all)]
Ohms = Annotated[Tolerance, _toleranced("ohm")]
Amps = Annotated[Tolerance, _toleranced("A")]
AnyFeed = Annotated[Feed, BeforeValidator(_feed)]
AnyRest = Annotated[Rest, BeforeValidator(_rest)]
Tracking = Annotated[float, Field(ge=0.0, le=1.5, strict=False)]
