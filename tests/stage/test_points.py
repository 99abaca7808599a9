from __future__ import annotations

import pytest

from benchkit.errors import EntryError
from benchkit.stage.design import Design
from benchkit.stage.points import find_point, parts_of, points_of, transistors_of
from benchkit.stage.topologies import POWERED, Variant, build
from tests.stage.designs import BREADBOARD, TERN, breadboard, changed, tern

TERN_POWERED = [
    "rail+",
    "rail-",
    "output",
    "rail+.current",
    "rail-.current",
    "rail+.drop",
    "rail-.drop",
    "spread",
    "spread.upper",
    "spread.lower",
    "driver.resistor",
    "emitter.upper.1",
    "emitter.lower.1",
    "emitter.pair.1",
    "stopper.upper.1",
    "stopper.lower.1",
    "spreader.transistor.vbe",
    "driver.upper.vbe",
    "driver.lower.vbe",
    "output.upper.1.vbe",
    "output.lower.1.vbe",
    "heatsink",
    "output.ac",
    "rail+.ac",
    "rail-.ac",
    "rails",
]
TERN_UNPOWERED = [
    "ohm.rails",
    "ohm.rail+",
    "ohm.rail-",
    "ohm.output",
    "ohm.spreader.upper",
    "ohm.spreader.lower",
    "ohm.emitter.upper.1",
    "ohm.emitter.lower.1",
    "ohm.heatsink.spreader.transistor",
    "ohm.heatsink.driver.upper",
    "ohm.heatsink.driver.lower",
    "ohm.heatsink.output.upper.1",
    "ohm.heatsink.output.lower.1",
    "diode.spreader.transistor",
    "diode.driver.upper",
    "diode.driver.lower",
    "diode.output.upper.1",
    "diode.output.lower.1",
]


def test_names_are_the_fixed_ones() -> None:
    assert [p.name for p in points_of(tern()) if p.powered] == TERN_POWERED
    assert [p.name for p in points_of(tern()) if not p.powered] == TERN_UNPOWERED


def test_resistor_feeds_have_points_and_sources_have_none() -> None:
    assert {"feed.upper", "feed.lower"} <= {p.name for p in points_of(breadboard())}
    assert not any(p.name.startswith(("driver", "stopper")) for p in points_of(breadboard()))


def test_parts_carry_the_same_names() -> None:
    assert [p.name for p in parts_of(tern())] == [
        "spreader.transistor",
        "spreader.upper",
        "spreader.lower",
        "spreader.trimmer",
        "feed.upper",
        "feed.lower",
        "driver.upper",
        "driver.lower",
        "driver.resistor",
        "stopper.upper.1",
        "output.upper.1",
        "emitter.upper.1",
        "stopper.lower.1",
        "output.lower.1",
        "emitter.lower.1",
    ]
    assert {p.kind for p in parts_of(tern())} == {"transistor", "resistor", "trimmer", "source", "servo"}
    assert [p.name for p in transistors_of(breadboard())] == [
        "spreader.transistor",
        "output.upper.1",
        "output.lower.1",
    ]


def test_pairs_and_divided_driver_resistors() -> None:
    design = changed(TERN, ("pairs = 1", 'pairs = 3\ndriver_resistor_to = "output"'))
    names = {p.name for p in points_of(design)}
    assert {"emitter.pair.3", "output.lower.3.vbe", "ohm.emitter.upper.3", "diode.output.upper.2"} <= names
    assert {"driver.resistor.upper", "driver.resistor.lower"} <= names
    assert "driver.resistor" not in names


@pytest.mark.parametrize("design", [tern(), breadboard()], ids=lambda d: d.name)
def test_every_modelled_point_lies_somewhere_in_the_circuit(design: Design) -> None:
    stage = build(design, Variant(fuses=True))
    unpowered = build(design, Variant(powered=False))
    for point in points_of(design):
        if point.name == "heatsink" or not point.modelled:
            continue
        if point.powered:
            assert point.name in stage.between or point.name in stage.currents
            nodes = stage.between.get(point.name, ())
            assert set(nodes) <= {"0", *stage.netlist.nodes()}
        else:
            assert set(unpowered.between[point.name]) <= {"0", *unpowered.netlist.nodes()}


@pytest.mark.parametrize("design", [tern(), breadboard()], ids=lambda d: d.name)
def test_words_say_where_both_probes_go(design: Design) -> None:
    for point in points_of(design):
        assert point.red
        if point.function not in ("temperature", "dc current"):
            assert point.black
            assert point.red != point.black


def test_junctions_are_probed_forward_and_arms_reverse() -> None:
    """The words and the circuit agree on polarity, for npn and pnp."""
    upper, lower = find_point(tern(), "diode.output.upper.1"), find_point(tern(), "diode.output.lower.1")
    assert (upper.red, upper.black) == ("base of output.upper.1", "emitter of output.upper.1")
    assert (lower.red, lower.black) == ("emitter of output.lower.1", "base of output.lower.1")
    stage = build(tern(), Variant(powered=False))
    assert stage.between["diode.output.lower.1"] == ("output.lower.1.e", "output.lower.1.b")
    arm = find_point(tern(), "ohm.spreader.lower")
    assert arm.red == "emitter of spreader.transistor"
    assert stage.between["ohm.spreader.lower"] == ("drive-", "spreader.base")


def test_a_pnp_spreader_stands_the_other_way_up() -> None:
    design = changed(BREADBOARD, ('transistor = "npn-small"', 'transistor = "pnp-medium"'))
    stage = build(design, POWERED)
    assert stage.between["spread.lower"] == ("drive+", "spreader.base")
    assert stage.between["spread.upper"] == ("spreader.base", "drive-")
    assert find_point(design, "spread.lower").red == "emitter of spreader.transistor"


def test_unknown_point_names_the_nearest() -> None:
    with pytest.raises(EntryError, match=r"emitter\.upper\.1"):
        find_point(tern(), "emiter.upper.1")
