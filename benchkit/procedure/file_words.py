"""What the words of a procedure file have to be: quantities, times, names of points and rules, words in braces."""

from __future__ import annotations

import re
from typing import TYPE_CHECKING

from benchkit import quantities
from benchkit.errors import BenchkitError, EntryError, FileError
from benchkit.judge.rules import find_rule

if TYPE_CHECKING:
    from benchkit.procedure.file import Section, Step

PLACEHOLDERS = frozenset(
    {
        "turns", "less_bias_way", "more_bias_way", "limit", "rails", "target", "design", "arm", "discharge_time",
        "both_rails", "Both_rails", "least_bias", "load", "drive", "drive_power", "third", "third_power",
    }
)  # fmt: skip
"""The words in braces that a step's text may hold; each stands for a fact of the design or of the step."""

COLD_PRESET = "the cold pre-set"
"""A trim's share: the drop that is to be set cold so that the target is met warm, as the model has it."""

MOST_DRIFT = 0.20
"""The most of the target that a settled reading may be let move in a minute; our own figure: ten times the usual."""

_SIDE = r"\.(upper|lower)"
_PART = rf"(spreader\.transistor|(predriver|driver){_SIDE}|output{_SIDE}\.\d+)"
POINT = re.compile(
    rf"rails|rail[+-](\.current|\.drop|\.ac)?|output(\.ac)?|spread({_SIDE})?|feed{_SIDE}|(pre)?driver\.resistor({_SIDE})?"
    rf"|emitter\.(upper|lower|pair)\.\d+|stopper{_SIDE}\.\d+|{_PART}\.vbe|heatsink"
    rf"|ohm\.(rails|rail[+-]|output|(spreader|feed){_SIDE}|(emitter|stopper){_SIDE}\.\d+|(pre)?driver\.resistor({_SIDE})?"
    rf"|heatsink\.{_PART})|diode\.{_PART}"
)
"""Names of test points that some design has; a step may name one that this design lacks, but not one that none has."""


def time_s(text: str) -> float:
    """Read a time (s) that may be written in minutes.

    Raises
    ------
    EntryError
        When it is none, or not above zero.

    Examples
    --------
    >>> time_s("5 min"), time_s("90 s")
    (300.0, 90.0)
    """
    minutes = text.strip().endswith("min")
    seconds = quantities.parse(text.strip().removesuffix("min") + " s" if minutes else text, "s")
    if seconds <= 0.0:
        raise EntryError(f"{text!r} is no time that anything takes", 'a time above zero, such as "5 min"')
    return 60.0 * seconds if minutes else seconds


def check_quantities(file: str, section: Section, step: Step) -> None:
    """Check every quantity of a step.

    Raises
    ------
    FileError
    """
    checks: list[tuple[str, str | None, str]] = [("seconds", step.seconds, "s"), ("ramp", step.ramp, "s")]
    if step.rails is not None and step.rails not in ("lowest", "full") and not step.rails.rstrip().endswith("%"):
        checks.append(("rails", step.rails, "V"))
    if step.settle is not None and step.settle != "the capacitors":
        checks.append(("settle", step.settle, "s"))
    if step.limit is not None and step.limit not in (
        "for least bias",
        "for the target",
        "for the drive",
        "for the power soak",
    ):
        checks.append(("limit", step.limit, "A"))
    checks.append(("tolerance", step.tolerance, "%"))
    if step.share != COLD_PRESET:
        checks.append(("share", step.share, "%"))
    checks += [("at_least", step.at_least, "s"), ("resistor", step.resistor, "ohm")]
    if step.drift is not None:
        amount, per, minute = step.drift.partition("/")
        if (per, minute.strip()) != ("/", "min"):
            raise FileError(
                file, f"section {section.name}, step {step.name}, drift", f"found {step.drift!r}",
                'an amount a minute, such as "2 %/min" (of the target) or "0.05 mV/min"',
            )  # fmt: skip
        if amount.rstrip().endswith("%"):
            checks.append(("drift", amount, "%"))
    if step.rails is not None and step.rails.rstrip().endswith("%"):
        checks.append(("rails", step.rails, "%"))
    for key, value, unit in checks:
        if value is None:
            continue
        check_quantity(file, f"section {section.name}, step {step.name}, {key}", key, value, unit)


def check_quantity(file: str, where: str, key: str, value: str, unit: str) -> None:
    """Check one quantity.

    Raises
    ------
    FileError
    """
    try:
        number = quantities.parse(value, unit)
    except BenchkitError as error:
        raise FileError(file, where, error.came, error.expected) from None
    least, most = _RANGES.get((key, unit), (0.0, None))
    if number <= least or (most is not None and number > most):
        expected = f"more than {least:g} {unit}" + ("" if most is None else f", at most {most:g} {unit}")
        raise FileError(file, where, f"found {value!r}", expected)


_RANGES: dict[tuple[str, str], tuple[float, float | None]] = {
    ("share", "%"): (0.0, 100.0),
    ("tolerance", "%"): (0.0, 60.0),
    ("rails", "%"): (0.0, 100.0),
    ("drift", "%"): (0.0, 100.0 * MOST_DRIFT),
    ("seconds", "s"): (0.0, 14400.0),
}
"""What a quantity has to be above and may reach at most; all others are above zero.

A trim that may miss by more than 60 % sets nothing, and nobody stands by a wait of over four hours: our own figures.
"""


def check_point(name: str) -> None:
    """Raise ValueError for a name that no design has as a test point."""
    plain = name.replace("ARM", "lower").replace("PART", "output.upper.1").replace("N", "1")
    if not POINT.fullmatch(plain):
        raise ValueError(f"{name!r} is no test point; the names stand in the list of test points")


def check_rule(name: str) -> None:
    """Raise ValueError for a name that is no rule."""
    try:
        find_rule(name)
    except EntryError as error:
        raise ValueError(f"{error.came}; expected {error.expected}") from None


def check_placeholders(text: str) -> None:
    """Raise ValueError for words in braces that stand for nothing."""
    rest = text
    while "{" in rest:
        _, _, rest = rest.partition("{")
        word, closed, rest = rest.partition("}")
        if not closed or word not in PLACEHOLDERS:
            known = ", ".join(sorted(PLACEHOLDERS))
            raise ValueError(f"the text holds {{{word}}}; the words in braces that are known are {known}")
