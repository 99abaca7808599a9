"""Gain and output resistance of the driven output stage against ngspice: differences of its runs, within 0.1 %.

Source: ngspice (Debian package), an independent program. Each point is solved by it four times: the drive a little
lower and higher, and the load a little lower and higher.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from benchkit.circuit.netlist import Netlist
from benchkit.stage.crossover import driven, setting_at, sweeps
from benchkit.stage.design import Design
from tests.reference.ngspice import run_deck
from tests.stage.catalogue import few
from tests.stage.designs import tern

LOAD_OHM, DROP_V, REGION_A = 8.0, 0.02, 0.5
STEP_V, STEP_OHM = 1e-3, 0.02
WITHIN = 1e-3


def _output_v(netlist: Netlist, values: dict[str, float], start: dict[str, float], **changed: float) -> float:
    moved = {key.replace("_", "."): value for key, value in changed.items()}
    shifted = {key: values[key] + step for key, step in moved.items()}
    return run_deck(netlist, {**values, **shifted}, start=start)["output"]


def _stages() -> dict[str, Design]:
    picked = {
        name: design
        for name, design in few().items()
        if design.output.topology in ("complementary-feedback-pair", "triple-emitter-follower")
    }
    first = {design.output.topology: (name, design) for name, design in picked.items()}
    return {"tern": tern(), **dict(first.values())}


@pytest.mark.parametrize("name", list(_stages()))
@pytest.mark.parametrize("point", [1, 2, 3, 5])
def test_gain_and_output_resistance(name: str, point: int) -> None:
    design = _stages()[name]
    setting = replace(setting_at(design, 25.0), positive_v=20.0, negative_v=-20.0)
    (ours,) = sweeps(design, (DROP_V,), LOAD_OHM, setting, REGION_A, each_side=3)
    most_v = REGION_A * (LOAD_OHM + design.output.emitter_resistor.value / design.output.pairs)
    side = np.geomspace(1e-3, 1.0, 3)
    _, solved = driven(design, (DROP_V,), LOAD_OHM, setting, most_v * np.concatenate([-side[::-1], [0.0], side]))
    values = {key: float(array[point if array.size > 1 else 0]) for key, array in solved.values.items()}
    netlist = solved.netlist
    start = {node: float(solved.voltage(node)[point]) for node in netlist.nodes()}
    up, down = (_output_v(netlist, values, start, drive_upper_volts=s, drive_lower_volts=s) for s in (STEP_V, -STEP_V))
    assert ours.gain[point] == pytest.approx((up - down) / (2.0 * STEP_V), rel=WITHIN)
    here_v = _output_v(netlist, values, start)
    assert ours.amps[point] == pytest.approx(here_v / LOAD_OHM, rel=1e-6, abs=1e-9)
    if abs(here_v) > 0.01:
        # A load a little larger takes less current: the output rises by the output resistance times that.
        more, less = (_output_v(netlist, values, start, load=step) for step in (STEP_OHM, -STEP_OHM))
        current = more / (LOAD_OHM + STEP_OHM) - less / (LOAD_OHM - STEP_OHM)
        assert ours.output_ohm[point] == pytest.approx(-(more - less) / current, rel=WITHIN)
