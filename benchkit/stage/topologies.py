"""From a design to a netlist: rails, feeds and spreader for every stage, and one function per topology.

A topology is one function in `TOPOLOGIES`. It receives a `Builder` whose spreader ends at the nodes ``drive+`` and
``drive-``, adds its transistors and resistors under their part names, and ends at ``output`` through
`Builder.output_pairs` or, when its emitter resistors do not lie at the emitters of the output devices,
`Builder.emitter_resistors`. Points follow from what is built: the builder notes between which nodes each one lies.

Nodes: ``rail+``, ``rail-``, ``0``, ``top`` (collector end of the upper arm, where the feed arrives), ``drive+``,
``drive-``, ``spreader.base``, ``output``, ``PART.e``, ``PART.b`` and ``PART.c`` for emitters, bases and collectors that
are nodes of their own.

A single-supply stage (negative rail "0 V") has no negative supply: its lower end is the node ``0`` itself, so that
everything that would hang from ``rail-`` to 0 V, and every point of that rail alone, is not there. The servo sinks into
0 V and holds the output at its share of the positive rail; ``ohm.rails`` is then the resistance from the rail to 0 V.

The spreader: the upper arm lies between ``top`` and the base, the lower arm between base and emitter. A collector
resistor lies between ``top`` and the collector, and the stage's bases are driven from the collector side: what the
rising feed current adds to the spread, the resistor takes off again. A pnp spreader stands the other way up.

The trimmer: in one arm it is one resistance between that arm's fixed resistor and the base; its wiring tells only what
an open wiper leaves. As a divider (arm "between") it is two sections of one track with the wiper at the base. A tied
divider has its wiper wired to its end at the collector-base arm: that section is bridged, the trimmer works in the
base-emitter arm alone, and an open wiper leaves the full track there: least bias.

Always present, so that faults are values only: a resistor of 1 Tohm over each transistor's three pairs of terminals and
from its collector to the heat sink; a source beside the servo; the contact of a wiper. The heat sink is bonded to 0 V
when the unit is powered; unpowered readings are taken with the bond open, so that a bleeder is no leak.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from functools import lru_cache

from benchkit.circuit.netlist import Netlist
from benchkit.errors import FileError
from benchkit.stage.design import Design
from benchkit.stage.points import points_of

VOLTMETER_OHM = 10e6
"""Input resistance of a voltmeter on its d.c. ranges, as is usual for bench and hand-held meters."""


@dataclass(frozen=True, kw_only=True)
class Variant:
    """Which form of the netlist is wanted.

    Attributes
    ----------
    powered : bool
        With supplies, sources and servo; without, they are open.
    find_trimmer : bool
        The trimmer (of one section) is an unknown conductance whose condition is the drop over both emitter resistors
        of pair 1.
    fuses : bool
        With a resistor in each fuse's place.
    meters : bool
        With a voltmeter across every voltage point (values ``meter.POINT``).
    probe : str
        Name of an unpowered point: with an ohmmeter there (values ``meter.amps``, ``meter.compliance_v``).
    """

    powered: bool = True
    find_trimmer: bool = False
    fuses: bool = False
    meters: bool = False
    probe: str = ""


POWERED = Variant()


@dataclass(frozen=True)
class StageNetlist:
    """A netlist and where its points lie.

    Attributes
    ----------
    netlist : Netlist
    between : dict
        Point name to the nodes of red and black probe.
    currents : dict
        Point name to the element whose current it is.
    """

    netlist: Netlist
    between: dict[str, tuple[str, str]]
    currents: dict[str, str]


@dataclass
class Builder:
    """A netlist under construction, for topology functions."""

    design: Design
    variant: Variant
    netlist: Netlist = field(default_factory=Netlist)
    between: dict[str, tuple[str, str]] = field(default_factory=dict)
    currents: dict[str, str] = field(default_factory=dict)

    def resistor(self, name: str, red: str, black: str, *, point: str = "") -> None:
        """Add a resistor; `point` names the drop from `red` to `black`."""
        self.netlist.resistor(name, red, black)
        if point:
            self.between[point] = (red, black)

    def transistor(self, name: str, device: str, collector: str, base: str, emitter: str) -> None:
        """Add a transistor with everything that lies beside it, and its points."""
        self.netlist.transistor(name, collector, base, emitter)
        for suffix, a, b in (
            ("ce", collector, emitter), ("be", base, emitter), ("bc", base, collector), ("sink", collector, "heatsink"),
        ):  # fmt: skip
            self.netlist.resistor(f"{name}.{suffix}", a, b)
        forward = (base, emitter) if self.design.device[device].polarity == "npn" else (emitter, base)
        self.between[f"{name}.vbe"] = forward
        self.between[f"diode.{name}"] = forward
        self.between[f"ohm.heatsink.{name}"] = (collector, "heatsink")

    def rail(self, side: str) -> str:
        """Node of the rail on a side: ``rail+`` or ``rail-``; below a single-supply stage, ``0``."""
        return "rail+" if side == "upper" else ("0" if self.design.single_supply else "rail-")

    def stopped_base(self, side: str, number: int, drive: str) -> str:
        """Node of an output device's base: `drive` itself, or beyond its stopper."""
        output = self.design.output
        if output.base_stopper is None:
            return drive
        name, base = f"stopper.{side}.{number}", f"output.{side}.{number}.b"
        # The base current of an npn flows into the base, that of a pnp out of it.
        npn = self.design.device[getattr(output, side)].polarity == "npn"
        self.resistor(name, *((drive, base) if npn else (base, drive)), point=name)
        return base

    def output_pairs(self, upper: str, lower: str) -> None:
        """Add all pairs of output devices as followers on the nodes `upper` and `lower`, and their resistors."""
        output = self.design.output
        for number in range(1, output.pairs + 1):
            for side, drive in (("upper", upper), ("lower", lower)):
                part = f"output.{side}.{number}"
                base = self.stopped_base(side, number, drive)
                self.transistor(part, getattr(output, side), self.rail(side), base, f"{part}.e")
            self.emitter_resistors(number)

    def emitter_resistors(self, number: int) -> None:
        """Add a pair's emitter resistors, between its `pair_nodes` and the output."""
        upper, lower = pair_nodes(self.design, number)
        for side, ends in (("upper", (upper, "output")), ("lower", ("output", lower))):
            self.resistor(f"emitter.{side}.{number}", *ends, point=f"emitter.{side}.{number}")
            self.between[f"ohm.emitter.{side}.{number}"] = ends
        self.between[f"emitter.pair.{number}"] = (upper, lower)


def pair_nodes(design: Design, number: int) -> tuple[str, str]:
    """Nodes where a pair's emitter resistors begin, on their sides away from the output."""
    if design.output.topology == "complementary-feedback-pair":
        return "driver.upper.e", "driver.lower.e"
    return f"output.upper.{number}.e", f"output.lower.{number}.e"


def single_emitter_follower(builder: Builder) -> None:
    """Add output devices straight on the spreader."""
    builder.output_pairs("drive+", "drive-")


def double_emitter_follower(builder: Builder) -> None:
    """Add drivers on the spreader and output devices on the drivers' emitters."""
    _drivers(builder, "drive+", "drive-")


def triple_emitter_follower(builder: Builder) -> None:
    """Add pre-drivers on the spreader, drivers on their emitters, and output devices on the drivers' emitters."""
    upper, lower = _followers(builder, "predriver", "drive+", "drive-")
    builder.resistor("predriver.resistor", upper, lower, point="predriver.resistor")
    _drivers(builder, upper, lower)


def complementary_feedback_pair(builder: Builder) -> None:
    """Add a driver on each side of the spreader whose collector drives the base of an output device at the rail.

    The output device is of the other polarity, its emitter at the rail; its collector meets the driver's emitter at
    the emitter resistor. The driver's resistor lies from the rail to the driver's collector: base-emitter of the output
    device, on the near side of its stopper.
    """
    output = builder.design.output
    for side, drive, emitter in zip(
        ("upper", "lower"), ("drive+", "drive-"), pair_nodes(builder.design, 1), strict=True
    ):
        collector, rail = f"driver.{side}.c", builder.rail(side)
        builder.transistor(f"driver.{side}", str(getattr(output, f"driver_{side}")), collector, drive, emitter)
        name = f"driver.resistor.{side}"
        builder.resistor(name, *((rail, collector) if side == "upper" else (collector, rail)), point=name)
        base = builder.stopped_base(side, 1, collector)
        builder.transistor(f"output.{side}.1", getattr(output, side), emitter, base, rail)
    builder.emitter_resistors(1)


def _followers(builder: Builder, role: str, upper: str, lower: str) -> tuple[str, str]:
    """Add a follower on each side, driven from the nodes `upper` and `lower`; the nodes of their emitters."""
    emitters = (f"{role}.upper.e", f"{role}.lower.e")
    for side, drive, emitter in zip(("upper", "lower"), (upper, lower), emitters, strict=True):
        device = str(getattr(builder.design.output, f"{role}_{side}"))
        builder.transistor(f"{role}.{side}", device, builder.rail(side), drive, emitter)
    return emitters


def _drivers(builder: Builder, drive_upper: str, drive_lower: str) -> None:
    """Add drivers, their resistors, and the output devices on their emitters."""
    upper, lower = _followers(builder, "driver", drive_upper, drive_lower)
    if builder.design.output.driver_resistor_to == "output":
        builder.resistor("driver.resistor.upper", upper, "output", point="driver.resistor.upper")
        builder.resistor("driver.resistor.lower", "output", lower, point="driver.resistor.lower")
    else:
        builder.resistor("driver.resistor", upper, lower, point="driver.resistor")
    builder.output_pairs(upper, lower)


TOPOLOGIES: dict[str, Callable[[Builder], None]] = {
    "single-emitter-follower": single_emitter_follower,
    "double-emitter-follower": double_emitter_follower,
    "triple-emitter-follower": triple_emitter_follower,
    "complementary-feedback-pair": complementary_feedback_pair,
}
"""Topologies that have a model."""


def check_modelled(design: Design, file_name: str) -> None:
    """Raise when there is no model of the stage.

    Raises
    ------
    FileError
    """
    if design.output.topology not in TOPOLOGIES:
        raise FileError(
            file_name, "output.topology", f'this version has no model of a "{design.output.topology}" yet',
            f"one of {', '.join(TOPOLOGIES)}", "The file itself is in order: keep it for a version that has the model",
        )  # fmt: skip


@lru_cache(maxsize=256)
def build(design: Design, variant: Variant = POWERED) -> StageNetlist:
    """Make the netlist of a design.

    Parameters
    ----------
    design : Design
    variant : Variant

    Returns
    -------
    StageNetlist
        Cached: the same object for the same design and variant.
    """
    builder = Builder(design, variant)
    _rails(builder)
    _spreader(builder)
    TOPOLOGIES[design.output.topology](builder)
    _feeds(builder)
    if variant.meters:
        for point in points_of(design):
            if point.powered and point.function == "dc volts" and point.name in builder.between:
                builder.netlist.resistor(f"meter.{point.name}", *builder.between[point.name])
    if variant.probe:
        builder.netlist.ohmmeter("meter", *builder.between[variant.probe])
    return StageNetlist(builder.netlist, builder.between, builder.currents)


def _rails(builder: Builder) -> None:
    netlist, design = builder.netlist, builder.design
    for rail in ("rail+",) if design.single_supply else ("rail+", "rail-"):
        sign = "positive" if rail == "rail+" else "negative"
        ends = ("rail+", "0") if sign == "positive" else ("0", "rail-")
        if builder.variant.powered:
            supplied = f"{rail}.supply" if builder.variant.fuses else rail
            netlist.supply(f"supply.{sign}", *((supplied, "0") if sign == "positive" else ("0", supplied)))
            builder.currents[f"{rail}.current"] = f"supply.{sign}"
            if builder.variant.fuses:
                drop = (supplied, rail) if sign == "positive" else (rail, supplied)
                builder.resistor(f"fuse.{sign}", *drop, point=f"{rail}.drop")
            if getattr(design.rails, f"other_{sign}") is not None:
                netlist.source(f"other.{sign}", *ends)
        if design.rails.bleed is not None:
            netlist.resistor(f"bleed.{sign}", *ends)
        builder.between[rail] = (rail, "0")
        builder.between[f"ohm.{rail}"] = ends
    if builder.variant.powered:
        netlist.resistor("heatsink.bond", "heatsink", "0")
    builder.between["output"] = ("output", "0")
    builder.between["ohm.output"] = ("output", "0")
    builder.between["ohm.rails"] = ("rail+", builder.rail("lower"))


def _spreader(builder: Builder) -> None:
    spreader, netlist = builder.design.spreader, builder.netlist
    npn = builder.design.device[spreader.transistor].polarity == "npn"
    base = "spreader.base"
    # The collector's end of the stage: above for npn, below for pnp; `far` is beyond the collector resistor.
    collector, emitter = ("drive+", "drive-") if npn else ("drive-", "drive+")
    far = collector
    if spreader.collector_resistor is not None:
        far = "top" if npn else "bottom"
        netlist.resistor("spreader.collector", far, collector)
    builder.transistor("spreader.transistor", spreader.transistor, collector, base, emitter)
    between = spreader.trimmer is not None and spreader.trimmer.arm == "between"
    free = free_section(builder.design) if builder.variant.find_trimmer else ""
    pair = pair_nodes(builder.design, 1)
    for arm, end in (("upper", far), ("lower", emitter)):
        inner = base
        if between:
            inner = f"spreader.{arm}.inner"
            section = f"spreader.trimmer.{arm}"
            if section == free:
                netlist.unknown(section, inner, "spreader.wiper", *pair)
            else:
                netlist.resistor(section, inner, "spreader.wiper")
        elif spreader.trimmer is not None and spreader.trimmer.arm == arm:
            inner = f"spreader.{arm}.inner"
            if free:
                netlist.unknown("spreader.trimmer", base, inner, *pair)
            else:
                netlist.resistor("spreader.trimmer", base, inner)
        netlist.resistor(f"spreader.{arm}", end, inner)
    if between:
        netlist.resistor("spreader.trimmer.wiper", "spreader.wiper", base)
        if tied_divider(builder.design):
            netlist.resistor("spreader.trimmer.tie", "spreader.upper.inner", base)
    builder.between["spread"] = ("drive+", "drive-")
    upper, lower = (far, base), (base, emitter)
    builder.between["spread.upper"] = upper if npn else upper[::-1]
    builder.between["spread.lower"] = lower if npn else lower[::-1]
    # A meter's test current finds the junctions beside the arms reverse biased: see the polarity rules of the points.
    builder.between["ohm.spreader.upper"] = upper if npn else upper[::-1]
    builder.between["ohm.spreader.lower"] = lower[::-1] if npn else lower


def tied_divider(design: Design) -> bool:
    """Whether the trimmer is a divider whose wiper is wired to one of its ends."""
    trimmer = design.spreader.trimmer
    return trimmer is not None and trimmer.arm == "between" and trimmer.wiring == "tied"


def free_section(design: Design) -> str:
    """Name of the resistance that is unknown while the trimmer is looked for; empty without a trimmer.

    Of a divider it is the upper section; of a tied one the lower, because the upper is bridged.
    """
    if design.spreader.trimmer is None:
        return ""
    if design.spreader.trimmer.arm != "between":
        return "spreader.trimmer"
    return f"spreader.trimmer.{'lower' if tied_divider(design) else 'upper'}"


def _feeds(builder: Builder) -> None:
    design, netlist = builder.design, builder.netlist
    negative = builder.rail("lower")
    nodes = netlist.nodes()
    top = "top" if "top" in nodes else "drive+"
    bottom = "bottom" if "bottom" in nodes else "drive-"
    if design.feed.upper.kind == "resistor":
        builder.resistor("feed.upper", "rail+", top, point="feed.upper")
    elif builder.variant.powered:
        netlist.source("feed.upper", "rail+", top)
    if design.feed.lower.kind == "resistor":
        builder.resistor("feed.lower", bottom, negative, point="feed.lower")
    elif builder.variant.powered:
        netlist.servo("feed.lower", bottom, negative, "output")
        netlist.source("feed.lower.stuck", bottom, negative)
