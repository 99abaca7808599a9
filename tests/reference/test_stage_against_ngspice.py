"""The stage's operating points against ngspice: same netlist, nominal parts.

Source: ngspice (Debian package), an independent program. Node voltages agree within 1e-6 relative + 1 uV.
"""

from __future__ import annotations

from collections.abc import Callable

import pytest

from benchkit.stage.conditions import Condition, Unpowered
from benchkit.stage.design import Design
from benchkit.stage.draws import nominal
from benchkit.stage.faults import Fault
from benchkit.stage.operate import Solved, solve_units
from benchkit.stage.runs import compiled
from benchkit.stage.topologies import POWERED, Variant
from benchkit.stage.unpowered import solve_unpowered
from tests.reference.ngspice import run_deck
from tests.stage.designs import BREADBOARD, TERN, breadboard, changed, tern

RELATIVE = 1e-6
ABSOLUTE_V = 1e-6


def _between() -> Design:
    """A trimmer that divides, two pairs, a collector resistor, drivers' resistors to the output."""
    return changed(
        TERN,
        ('arm = "lower"', 'arm = "between"'),
        ('lower = "560 ohm 1 %"', 'lower = "470 ohm 1 %"\ncollector_resistor = "33 ohm 5 %"'),
        ("pairs = 1", 'pairs = 2\ndriver_resistor_to = "output"'),
    )


def _pnp_spreader() -> Design:
    return changed(
        BREADBOARD,
        ('transistor = "npn-small"', 'transistor = "pnp-medium"\ncollector_resistor = "22 ohm 5 %"'),
        ('lower = "1 kohm 0.1 %"', 'lower = "servo"'),
    )


DESIGNS: dict[str, Callable[[], Design]] = {
    "tern": tern,
    "breadboard": breadboard,
    "between": _between,
    "pnp spreader": _pnp_spreader,
}


def _agrees(solved: Solved, design: Design, variant: Variant = POWERED) -> None:
    assert solved.converged.all()
    values = {key: float(value[0]) for key, value in solved.solution.values.items()}
    netlist = compiled(design, variant).netlist
    start = {node: float(solved.solution.voltage(node)[0]) for node in netlist.nodes()}
    found = run_deck(netlist, values, start=start)
    assert set(found) == set(netlist.nodes())
    for node, volts in found.items():
        ours = float(solved.solution.voltage(node)[0])
        assert ours == pytest.approx(volts, rel=RELATIVE, abs=ABSOLUTE_V), node


@pytest.mark.parametrize("name", DESIGNS)
@pytest.mark.parametrize("trimmer", ["least", "most", 0.5])
@pytest.mark.parametrize("celsius", [15.0, 25.0, 60.0])
def test_node_voltages_at_full_rails(name: str, trimmer: float | str, celsius: float) -> None:
    design = DESIGNS[name]()
    condition = Condition(
        positive_v=design.rails.positive_v,
        negative_v=design.rails.negative_v,
        trimmer=trimmer,  # type: ignore[arg-type]
        ambient_c=celsius,
    )
    _agrees(solve_units(design, nominal(design), condition, loading="none"), design)


def test_half_of_the_rails_with_a_limit_and_fuse_resistors() -> None:
    condition = Condition(positive_v=17.5, negative_v=-17.5, limit_a=0.05, trimmer="least", fuse_ohm=10.0)
    solved = solve_units(tern(), nominal(tern()), condition, loading="none")
    _agrees(solved, tern(), Variant(fuses=True))
    assert solved.points["rail+.drop"][0] == pytest.approx(10.0 * solved.points["rail+.current"][0], rel=1e-4)


@pytest.mark.parametrize("part", ["output.upper.1", "driver.lower"])
def test_a_shorted_device_against_the_limit(part: str) -> None:
    condition = Condition(positive_v=15.0, negative_v=-15.0, limit_a=0.05, trimmer="least")
    fault = Fault(part, "collector-emitter short")
    _agrees(solve_units(tern(), nominal(tern()), condition, fault, loading="none"), tern())


@pytest.mark.parametrize("point", ["ohm.spreader.lower", "ohm.rails", "diode.output.lower.1"])
def test_unpowered_circuit(point: str) -> None:
    # Bleeders tie the circuit to 0 V: ngspice doesn't solve one that floats.
    tied = changed(BREADBOARD, ('local_capacitors = "100 uF"', 'bleed = "100 kohm"'))
    for design in (tern(), tied):
        read = solve_unpowered(design, nominal(design), Unpowered(point=point, trimmer="least"))
        netlist = compiled(design, Variant(powered=False, probe=point)).netlist
        values = {key: float(value[0]) for key, value in read.solution.values.items()}
        start = {node: float(read.solution.voltage(node)[0]) for node in netlist.nodes()}
        found = run_deck(netlist, values, start=start)
        meter = netlist.elements["meter"]
        ours = read.solution.between(meter.plus, meter.minus)[0]  # type: ignore[union-attr]
        theirs = found.get(meter.plus, 0.0) - found.get(meter.minus, 0.0)  # type: ignore[union-attr]
        assert ours == pytest.approx(theirs, rel=RELATIVE, abs=ABSOLUTE_V)
