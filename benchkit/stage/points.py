"""Test points and parts of a design: their dotted names, and in words where the probes go.

A point's sign follows from its probes: reading = V(red) - V(black). Powered drops are positive when current flows from
`rail+` to `rail-`, a transistor's ``vbe`` and a stopper's drop when the device conducts, npn or pnp.

Unpowered points fix the polarity too, because a meter's test current sees junctions: for resistances red and black are
chosen so that junctions beside the part are reverse biased where that is possible (red at the more positive end of the
working stage keeps collector-base junctions off; at the base-emitter arm red goes to the *emitter*).

``rails`` is the voltage from rail to rail, for seeing it fall after off; the model has nothing to say about it.

A single-supply stage has neither it nor points of a negative rail: ``rail-`` and all that begins with it,
``ohm.rail-``. Its ``ohm.rails`` goes from the rail to 0 V, like ``ohm.rail+``: 0 V is the other end of the stage.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import lru_cache
from typing import Literal

from benchkit.errors import EntryError
from benchkit.stage.design import Design

PartKind = Literal["resistor", "trimmer", "transistor", "source", "servo"]


@dataclass(frozen=True, kw_only=True)
class Point:
    """A named place to measure.

    Attributes
    ----------
    name : str
        Dotted, such as ``emitter.upper.1``.
    unit : str
        "V", "A", "ohm" or "degC".
    function : str
        The meter's function: "dc volts", "ac volts", "dc current", "ohms", "ohms 4-wire", "diode", "temperature".
    red, black : str
        Where the probes go, in words; black is empty for a temperature and for a current.
    powered : bool
        Whether the reading is taken with the unit powered.
    modelled : bool
        Whether there are expected values for it (none for a.c. readings and from rail to rail).
    """

    name: str
    unit: str
    function: str
    red: str
    black: str
    powered: bool
    modelled: bool = True


@dataclass(frozen=True, kw_only=True)
class Part:
    """A part of the design.

    Attributes
    ----------
    name : str
        Dotted, such as ``output.upper.1``.
    kind : str
        "resistor", "trimmer", "transistor", "source" or "servo".
    role : str
        "spreader", "feed", "predriver", "driver", "output", "emitter" or "stopper".
    device : str
        Name of a transistor's device table; empty for other parts.
    nominal : float
        Ohms or amperes; 0 for transistors and the servo.
    fraction : float
        Tolerance as a fraction.
    """

    name: str
    kind: PartKind
    role: str
    device: str = ""
    nominal: float = 0.0
    fraction: float = 0.0


SIDES: tuple[Literal["upper", "lower"], Literal["upper", "lower"]] = ("upper", "lower")


@lru_cache(maxsize=64)
def parts_of(design: Design) -> tuple[Part, ...]:
    """All parts of a design, in the fixed order in which their values are drawn."""
    return tuple(_parts(design))


def transistors_of(design: Design) -> tuple[Part, ...]:
    """The transistors among the parts."""
    return tuple(part for part in parts_of(design) if part.kind == "transistor")


def _resistor(name: str, role: str, value: tuple[float, float]) -> Part:
    return Part(name=name, kind="resistor", role=role, nominal=value[0], fraction=value[1])


def _parts(design: Design) -> Iterator[Part]:
    spreader, output = design.spreader, design.output
    yield Part(name="spreader.transistor", kind="transistor", role="spreader", device=spreader.transistor)
    yield _resistor("spreader.upper", "spreader", spreader.upper)
    yield _resistor("spreader.lower", "spreader", spreader.lower)
    if spreader.collector_resistor is not None:
        yield _resistor("spreader.collector", "spreader", spreader.collector_resistor)
    if spreader.trimmer is not None:
        value, fraction = spreader.trimmer.value
        yield Part(name="spreader.trimmer", kind="trimmer", role="spreader", nominal=value, fraction=fraction)
    for side in SIDES:
        feed = getattr(design.feed, side)
        yield Part(name=f"feed.{side}", kind=feed.kind, role="feed", nominal=feed.value[0], fraction=feed.value[1])
    for role in ("predriver", "driver"):
        for side in SIDES:
            device = getattr(output, f"{role}_{side}")
            if device is not None:
                yield Part(name=f"{role}.{side}", kind="transistor", role=role, device=device)
        value_of = getattr(output, f"{role}_resistor")
        if value_of is not None:
            for name in _driver_resistors(design) if role == "driver" else ("predriver.resistor",):
                yield _resistor(name, role, value_of)
    for number in range(1, output.pairs + 1):
        for side in SIDES:
            if output.base_stopper is not None:
                yield _resistor(f"stopper.{side}.{number}", "stopper", output.base_stopper)
            yield Part(name=f"output.{side}.{number}", kind="transistor", role="output", device=getattr(output, side))
            yield _resistor(f"emitter.{side}.{number}", "emitter", output.emitter_resistor)


def _driver_resistors(design: Design) -> tuple[str, ...]:
    output = design.output
    if output.driver_resistor_to == "output" or output.topology == "complementary-feedback-pair":
        return ("driver.resistor.upper", "driver.resistor.lower")
    return ("driver.resistor",)


@lru_cache(maxsize=64)
def points_of(design: Design) -> tuple[Point, ...]:
    """All test points of a design: powered d.c., powered a.c., unpowered; in a fixed order."""
    return (*_powered(design), *_alternating(design), *_unpowered(design))


def find_point(design: Design, name: str) -> Point:
    """Look up a test point by name.

    Raises
    ------
    EntryError
        When the design has no such point; the message names the nearest ones.
    """
    points = {point.name: point for point in points_of(design)}
    if name in points:
        return points[name]
    import difflib

    near = difflib.get_close_matches(name, points, 3)
    raise EntryError(
        f'"{name}" is no test point of {design.name}',
        "one of its test points" + (f", perhaps {' or '.join(near)}" if near else ""),
    )


def _volts(name: str, red: str, black: str) -> Point:
    return Point(name=name, unit="V", function="dc volts", red=red, black=black, powered=True)


def _across(name: str, part: str, plus: str, minus: str) -> Point:
    return _volts(name, f"{part}, end towards {plus}", f"{part}, end towards {minus}")


def _powered(design: Design) -> Iterator[Point]:
    output = design.output
    yield _volts("rail+", "positive rail", "0 V")
    if not design.single_supply:
        yield _volts("rail-", "negative rail", "0 V")
    single = "output, before coil, relay and output capacitor"
    yield _volts("output", single if design.single_supply else "output, before coil and relay", "0 V")
    for rail in ("rail+",) if design.single_supply else ("rail+", "rail-"):
        sign = "positive" if rail == "rail+" else "negative"
        yield Point(
            name=f"{rail}.current", unit="A", function="dc current", red=f"{sign} supply's own display", black="",
            powered=True,
        )  # fmt: skip
    yield _across("rail+.drop", "resistor in the positive fuse's place", "the supply", "the stage")
    if not design.single_supply:
        yield _across("rail-.drop", "resistor in the negative fuse's place", "the stage", "the supply")
    yield _volts("spread", "upper base line (collector side of the spreader)", "lower base line")
    npn = design.device[design.spreader.transistor].polarity == "npn"
    upper = ("collector end of the upper arm", "base of spreader.transistor")
    lower = ("base of spreader.transistor", "emitter of spreader.transistor")
    if not npn:
        upper, lower = (upper[1], upper[0]), (lower[1], lower[0])
    yield _volts("spread.upper", *upper)
    yield _volts("spread.lower", *lower)
    if design.feed.upper.kind == "resistor":
        yield _across("feed.upper", "upper feed resistor", "rail+", "the spreader")
    if design.feed.lower.kind == "resistor":
        yield _across("feed.lower", "lower feed resistor", "the spreader", lower_rail(design))
    if output.predriver_resistor is not None:
        yield _across("predriver.resistor", "predriver.resistor", "predriver.upper", "predriver.lower")
    if output.driver_resistor is not None:
        for name in _driver_resistors(design):
            end = ("driver.upper", "driver.lower")
            if output.topology == "complementary-feedback-pair":
                end = ("driver.lower", lower_rail(design))
                if name.endswith(".upper"):
                    end = ("rail+", "driver.upper")
            elif name.endswith(".upper"):
                end = ("driver.upper", "output")
            elif name.endswith(".lower"):
                end = ("output", "driver.lower")
            yield _across(name, name, *end)
    for number in range(1, output.pairs + 1):
        top, bottom = (_pair_end(design, side, number) for side in SIDES)
        yield _volts(f"emitter.upper.{number}", top, "output")
        yield _volts(f"emitter.lower.{number}", "output", bottom)
        yield _volts(f"emitter.pair.{number}", top, bottom)
        if output.base_stopper is not None:
            for side in SIDES:
                name, ends = f"stopper.{side}.{number}", ("the driver", "the base")
                into_base = design.device[getattr(output, side)].polarity == "npn"
                yield _across(name, name, *(ends if into_base else ends[::-1]))
    for part in transistors_of(design):
        ends = (f"base of {part.name}", f"emitter of {part.name}")
        red, black = ends if design.device[part.device].polarity == "npn" else ends[::-1]
        yield _volts(f"{part.name}.vbe", red, black)
    yield Point(
        name="heatsink", unit="degC", function="temperature", red="heat sink, beside the output devices", black="",
        powered=True,
    )  # fmt: skip


def lower_rail(design: Design) -> str:
    """What the lower end of the stage is called: ``rail-``, or 0 V in a single-supply stage."""
    return "0 V" if design.single_supply else "rail-"


def _pair_end(design: Design, side: str, number: int) -> str:
    """The end of an emitter resistor away from the output, in words."""
    end = "collector" if design.output.topology == "complementary-feedback-pair" else "emitter"
    return f"{end} of output.{side}.{number}"


def _alternating(design: Design) -> Iterator[Point]:
    for name, red in (("output.ac", "output"), ("rail+.ac", "positive rail"), ("rail-.ac", "negative rail")):
        if design.single_supply and name.startswith("rail-"):
            continue
        yield Point(
            name=name, unit="V", function="ac volts", red=red, black="0 V", powered=True, modelled=False
        )  # fmt: skip
    if not design.single_supply:
        yield Point(
            name="rails", unit="V", function="dc volts", red="positive rail", black="negative rail", powered=True,
            modelled=False,
        )  # fmt: skip


def _ohms(name: str, red: str, black: str, function: str = "ohms") -> Point:
    return Point(name=f"ohm.{name}", unit="ohm", function=function, red=red, black=black, powered=False)


def _unpowered(design: Design) -> Iterator[Point]:
    yield _ohms("rails", "positive rail", "0 V" if design.single_supply else "negative rail")
    yield _ohms("rail+", "positive rail", "0 V")
    if not design.single_supply:
        yield _ohms("rail-", "0 V", "negative rail")
    yield _ohms("output", "output", "0 V")
    npn = design.device[design.spreader.transistor].polarity == "npn"
    base, far, near = "base of spreader.transistor", "collector end of the upper arm", "emitter of spreader.transistor"
    yield _ohms("spreader.upper", *((far, base) if npn else (base, far)))
    yield _ohms("spreader.lower", *((near, base) if npn else (base, near)))
    for number in range(1, design.output.pairs + 1):
        for side in SIDES:
            top, bottom = _pair_end(design, side, number), "output"
            red, black = (top, bottom) if side == "upper" else (bottom, top)
            yield _ohms(f"emitter.{side}.{number}", red, black, "ohms 4-wire")
    for part in transistors_of(design):
        yield _ohms(f"heatsink.{part.name}", f"collector of {part.name}", "heat sink, its bond to 0 V open")
    for part in transistors_of(design):
        ends = (f"base of {part.name}", f"emitter of {part.name}")
        red, black = ends if design.device[part.device].polarity == "npn" else ends[::-1]
        yield Point(
            name=f"diode.{part.name}", unit="V", function="diode", red=red, black=black, powered=False
        )  # fmt: skip
