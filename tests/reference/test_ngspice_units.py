"""Units made with ngspice: what a meter shows there agrees with our own readings, and a hopeless copy harms no other.

Source: ngspice (Debian package), an independent program.
"""

from __future__ import annotations

import numpy as np
import pytest

from benchkit.circuit.netlist import Netlist
from benchkit.stage.conditions import Condition, Unpowered
from benchkit.stage.draws import draw, seeds
from benchkit.stage.faults import HEALTHY, parse_fault
from benchkit.stage.observations import Conditions, Observation
from benchkit.stage.operate import solve_units
from benchkit.stage.unpowered import nominal_range, solve_unpowered
from tests.reference import ngspice, ngspice_units
from tests.stage.designs import breadboard, tern

pytestmark = pytest.mark.skipif(not ngspice.installed(), reason="ngspice is not installed")

LOW = Condition(positive_v=14.0, negative_v=-14.0, limit_a=0.05, trimmer="least")
FAULTS = [HEALTHY, parse_fault("emitter.upper.1: open"), parse_fault("output.lower.1: collector-emitter short")]


def test_powered_readings_hold_the_meter_and_agree() -> None:
    design = tern()
    parameters = draw(design, len(FAULTS), seeds("unit", 3))
    travel = np.zeros(len(FAULTS))
    found = ngspice_units.read_powered(design, parameters, LOW, FAULTS, travel)
    assert found.solved.all()
    ours = solve_units(design, parameters, LOW, FAULTS, position=travel, loading="each")
    assert set(found.values) == set(ours.points) - {"heatsink"}
    for name, theirs in found.values.items():
        tenth_of_noise = 0.1 * (ngspice_units.SHARE * np.abs(theirs) + found.floors[name])
        assert (np.abs(ours.points[name] - theirs) < tenth_of_noise).all(), name


def test_a_voltmeter_takes_something_away() -> None:
    design = tern()
    parameters = draw(design, len(FAULTS), seeds("unit", 3))
    with_meter, without = (
        ngspice_units.read_powered(design, parameters, LOW, FAULTS, np.zeros(len(FAULTS)), meters=meters)
        for meters in (True, False)
    )
    # the upper device hangs in the air with its emitter resistor open: 10 Mohm bring it down by some ten millivolts
    vbe = "output.upper.1.vbe"
    assert np.abs(with_meter.values[vbe] - without.values[vbe])[1] > 1e-3


@pytest.mark.parametrize("point", ["ohm.spreader.lower", "diode.output.upper.1", "ohm.heatsink.output.upper.1"])
def test_unpowered_readings_agree(point: str) -> None:
    design = breadboard()
    faults = [HEALTHY, parse_fault("output.upper.1: collector to heatsink"), parse_fault("spreader.lower: open")]
    parameters = draw(design, len(faults), seeds("unit", 4))
    found = ngspice_units.read_unpowered(design, parameters, faults, np.zeros(len(faults)), [point])
    condition = Unpowered(point=point, trimmer="least")
    on_range = nominal_range(design, point, "least")
    ours = solve_unpowered(design, parameters, condition, faults, on_range=on_range).values
    solved = found.solved
    assert solved[:2].all()
    assert found.values[point][solved] == pytest.approx(ours[solved], rel=1e-5, abs=1e-6)


def test_a_copy_without_a_solution_harms_no_other() -> None:
    netlist = Netlist()
    netlist.supply("supply", "rail", "0")
    netlist.resistor("feed", "rail", "base")
    netlist.transistor("diode", "base", "base", "0")
    nowhere = np.where(np.arange(30) == 17, np.nan, 1e-14)
    values = {"supply.volts": np.asarray(10.0), "supply.limit_a": np.asarray(1.0), "feed": np.linspace(1e3, 2e3, 30)}
    spent, start = ngspice_units.Spent(), {"rail": np.full(30, 10.0)}
    found = ngspice_units.Deck(netlist, values | {"diode.IS": nowhere}, 30, spent).solve(start)
    assert np.flatnonzero(np.isnan(found["base"])).tolist() == [17]
    sure = ngspice_units.Deck(netlist, values | {"diode.IS": np.full(30, 1e-14)}, 30, spent).solve(start)
    others = np.arange(30) != 17
    assert found["base"][others] == pytest.approx(sure["base"][others], rel=1e-6)
    assert (np.abs(sure["base"] - 0.7) < 0.1).all()


def test_noise_and_observations() -> None:
    points = {"output": np.full(4000, 2.0), "ohm.rails": np.array([100.0, np.inf, np.nan] + [100.0] * 3997)}
    floors = {"output": 20e-6, "ohm.rails": 0.02}
    solved = np.ones(4000, np.bool_)
    found = ngspice_units.Found(values=points, solved=solved, floors=floors, spent=ngspice_units.Spent())
    shown, uncertain = ngspice_units.add_noise(found, seeds("noise", 1))
    assert np.std(shown["output"]) == pytest.approx(3e-4 * 2.0 + 20e-6, rel=0.05)
    assert uncertain["output"][0] == pytest.approx(6.2e-4, rel=0.01)
    assert np.isinf(shown["ohm.rails"][1])
    conditions: dict[str, Conditions] = {"output": (LOW,), "ohm.rails": (Unpowered(point="ohm.rails"),)}
    assert [one.point for one in ngspice_units.observations(shown, uncertain, conditions, 2)] == ["output"]
    both = ngspice_units.observations(shown, uncertain, conditions, 0)
    assert both[0] == Observation(
        conditions=(LOW,), point="output", value=float(shown["output"][0]),
        standard_uncertainty=float(uncertain["output"][0]),
    )  # fmt: skip
