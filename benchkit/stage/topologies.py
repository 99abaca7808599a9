"""From a design to a netlist: rails, feeds and spreader for every stage, and one function per topology.

A topology is one function in `TOPOLOGIES`. It receives a `Builder` whose spreader ends at the nodes ``drive+`` and
``drive-``, adds its transistors and resistors under their part names, and ends at ``output`` through
`Builder.output_pairs`. Points follow from what is built: the builder notes between which nodes each one lies.

Nodes: ``rail+``, ``rail-``, ``0``, ``top`` (collector end of the upper arm, where the feed arrives), ``drive+``,
``drive-``, ``spreader.base``, ``output``, ``PART.e`` and ``PART.b`` for emitters and bases that are nodes of their own.

The spreader: the upper arm lies between ``top`` and the base, the lower arm between base and emitter. A collector
resistor lies between ``top`` and the collector, and the stage's bases are driven from the collector side: what the
rising feed current adds to the spread, the resistor takes off again. A pnp spreader stands the other way up.

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

    def output_pairs(self, upper: str, lower: str) -> None:
        """Add all pairs of output devices, driven from the nodes `upper` and `lower`, and their resistors."""
        output = self.design.output
        for number in range(1, output.pairs + 1):
            for side, drive, rail in (("upper", upper, "rail+"), ("lower", lower, "rail-")):
                part = f"output.{side}.{number}"
                base = drive
                if output.base_stopper is not None:
                    base = f"{part}.b"
                    ends = (drive, base) if side == "upper" else (base, drive)
                    self.resistor(f"stopper.{side}.{number}", *ends, point=f"stopper.{side}.{number}")
                emitter = f"{part}.e"
                self.transistor(part, getattr(output, side), rail, base, emitter)
                ends = (emitter, "output") if side == "upper" else ("output", emitter)
                self.resistor(f"emitter.{side}.{number}", *ends, point=f"emitter.{side}.{number}")
                self.between[f"ohm.emitter.{side}.{number}"] = ends
            self.between[f"emitter.pair.{number}"] = (f"output.upper.{number}.e", f"output.lower.{number}.e")


def single_emitter_follower(builder: Builder) -> None:
    """Add output devices straight on the spreader."""
    builder.output_pairs("drive+", "drive-")


def double_emitter_follower(builder: Builder) -> None:
    """Add drivers on the spreader and output devices on the drivers' emitters."""
    output = builder.design.output
    upper, lower = "driver.upper.e", "driver.lower.e"
    builder.transistor("driver.upper", str(output.driver_upper), "rail+", "drive+", upper)
    builder.transistor("driver.lower", str(output.driver_lower), "rail-", "drive-", lower)
    if output.driver_resistor_to == "output":
        builder.resistor("driver.resistor.upper", upper, "output", point="driver.resistor.upper")
        builder.resistor("driver.resistor.lower", "output", lower, point="driver.resistor.lower")
    else:
        builder.resistor("driver.resistor", upper, lower, point="driver.resistor")
    builder.output_pairs(upper, lower)


TOPOLOGIES: dict[str, Callable[[Builder], None]] = {
    "single-emitter-follower": single_emitter_follower,
    "double-emitter-follower": double_emitter_follower,
}
"""Topologies that have a model."""


def check_modelled(design: Design, file_name: str) -> None:
    """Raise when this version has no model of the stage.

    Raises
    ------
    FileError
    """
    next_step = "The file itself is in order: keep it for a version that has the model"
    if design.output.topology not in TOPOLOGIES:
        known = ", ".join(TOPOLOGIES)
        raise FileError(
            file_name, "output.topology", f'this version has no model of a "{design.output.topology}" yet',
            f"one of {known}", next_step,
        )  # fmt: skip
    if design.rails.negative_v == 0.0:
        raise FileError(
            file_name, "rails.negative", "this version has no model of a single-supply stage yet",
            "a negative rail below 0 V", next_step,
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
    netlist, rails = builder.netlist, builder.design.rails
    for rail, sign in (("rail+", "positive"), ("rail-", "negative")):
        ends = ("rail+", "0") if sign == "positive" else ("0", "rail-")
        if builder.variant.powered:
            supplied = f"{rail}.supply" if builder.variant.fuses else rail
            netlist.supply(f"supply.{sign}", *((supplied, "0") if sign == "positive" else ("0", supplied)))
            builder.currents[f"{rail}.current"] = f"supply.{sign}"
            if builder.variant.fuses:
                drop = (supplied, rail) if sign == "positive" else (rail, supplied)
                builder.resistor(f"fuse.{sign}", *drop, point=f"{rail}.drop")
            if getattr(rails, f"other_{sign}") is not None:
                netlist.source(f"other.{sign}", *ends)
        if rails.bleed is not None:
            netlist.resistor(f"bleed.{sign}", *ends)
        builder.between[rail] = (rail, "0")
        builder.between[f"ohm.{rail}"] = ends
    if builder.variant.powered:
        netlist.resistor("heatsink.bond", "heatsink", "0")
    builder.between["output"] = ("output", "0")
    builder.between["ohm.output"] = ("output", "0")
    builder.between["ohm.rails"] = ("rail+", "rail-")


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
    for arm, end in (("upper", far), ("lower", emitter)):
        inner = base
        if between:
            inner = f"spreader.{arm}.inner"
            section = f"spreader.trimmer.{arm}"
            if arm == "upper" and builder.variant.find_trimmer:
                netlist.unknown(section, inner, "spreader.wiper", "output.upper.1.e", "output.lower.1.e")
            else:
                netlist.resistor(section, inner, "spreader.wiper")
        elif spreader.trimmer is not None and spreader.trimmer.arm == arm:
            inner = f"spreader.{arm}.inner"
            if builder.variant.find_trimmer:
                netlist.unknown("spreader.trimmer", base, inner, "output.upper.1.e", "output.lower.1.e")
            else:
                netlist.resistor("spreader.trimmer", base, inner)
        netlist.resistor(f"spreader.{arm}", end, inner)
    if between:
        netlist.resistor("spreader.trimmer.wiper", "spreader.wiper", base)
    builder.between["spread"] = ("drive+", "drive-")
    upper, lower = (far, base), (base, emitter)
    builder.between["spread.upper"] = upper if npn else upper[::-1]
    builder.between["spread.lower"] = lower if npn else lower[::-1]
    # A meter's test current finds the junctions beside the arms reverse biased: see the polarity rules of the points.
    builder.between["ohm.spreader.upper"] = upper if npn else upper[::-1]
    builder.between["ohm.spreader.lower"] = lower[::-1] if npn else lower


def _feeds(builder: Builder) -> None:
    design, netlist = builder.design, builder.netlist
    nodes = netlist.nodes()
    top = "top" if "top" in nodes else "drive+"
    bottom = "bottom" if "bottom" in nodes else "drive-"
    if design.feed.upper.kind == "resistor":
        builder.resistor("feed.upper", "rail+", top, point="feed.upper")
    elif builder.variant.powered:
        netlist.source("feed.upper", "rail+", top)
    if design.feed.lower.kind == "resistor":
        builder.resistor("feed.lower", bottom, "rail-", point="feed.lower")
    elif builder.variant.powered:
        netlist.servo("feed.lower", bottom, "rail-", "output")
        netlist.source("feed.lower.stuck", bottom, "rail-")
