"""The trimmer's slope against finite differences of ngspice runs, every arm and both wirings: within 1 %.

Source: ngspice (Debian package), an independent program. Temperatures and travel are round numbers, so that the decks
are the same on every machine; the slope at the target itself is compared where ngspice is installed.
"""

from __future__ import annotations

import numpy as np
import pytest

from benchkit.stage.design import Design, parse_design
from benchkit.stage.draws import nominal
from benchkit.stage.operate import Solved, solve_units
from benchkit.stage.points import transistors_of
from benchkit.stage.runs import compiled
from benchkit.stage.topologies import POWERED, pair_nodes
from benchkit.stage.trimmer import at_target, full_rails
from benchkit.stage.trimmer_slope import slope, slope_at
from tests.reference import ngspice
from tests.reference.ngspice import run_deck
from tests.stage.catalogue import Wanted, text

PLACE, STEP = 0.5, 0.005
WITHIN = 0.01

ARMS = [(arm, wiring) for arm in ("lower", "upper", "between") for wiring in ("series", "tied")]


def _design(arm: str, wiring: str, topology: str = "double-emitter-follower") -> Design:
    wanted = Wanted(topology=topology, feed="source servo", trimmer=arm, wiring=wiring)
    return parse_design(text(wanted), wanted.name)


def _temperatures(stage: Design) -> dict[str, float]:
    """Round temperatures of a warm stage."""
    by_role = {"output": 42.0, "driver": 36.0, "predriver": 34.0, "spreader": 38.0}
    return {part.name: by_role[part.role] for part in transistors_of(stage)}


def _by_ngspice(stage: Design, solved: Solved) -> tuple[float, float]:
    """Emitter drop and quiescent current of one unit as ngspice solves its values."""
    assert solved.converged.all()
    netlist = compiled(stage, POWERED).netlist
    values = {key: float(value[0]) for key, value in solved.solution.values.items()}
    start = {node: float(solved.solution.voltage(node)[0]) for node in netlist.nodes()}
    volts = run_deck(netlist, values, start=start)
    upper, lower = pair_nodes(stage, 1)
    amps = sum(
        (volts[pair_nodes(stage, n)[0]] - volts["output"]) / values[f"emitter.upper.{n}"]
        for n in range(1, stage.output.pairs + 1)
    )
    return (volts[upper] - volts[lower]) / 2.0, amps


def _differences(stage: Design, place: float, temperatures: dict[str, float]) -> tuple[float, float]:
    """Central differences of drop (V) and current (A) per turn."""
    found = []
    for travel in (place - STEP, place + STEP):
        solved = solve_units(
            stage, nominal(stage), full_rails(stage, trimmer=travel, when="cold"), temperatures_c=temperatures,
            loading="none",
        )  # fmt: skip
        found.append(_by_ngspice(stage, solved))
    assert stage.spreader.trimmer is not None
    turns = 2.0 * STEP * stage.spreader.trimmer.turns
    return (found[1][0] - found[0][0]) / turns, (found[1][1] - found[0][1]) / turns


@pytest.mark.parametrize(("arm", "wiring"), ARMS)
def test_slope_is_that_of_ngspice(arm: str, wiring: str) -> None:
    stage = _design(arm, wiring)
    temperatures = _temperatures(stage)
    ours = slope_at(stage, PLACE, temperatures)
    drop_v, current_a = _differences(stage, PLACE, temperatures)
    assert ours.drop_v_per_turn == pytest.approx(drop_v, rel=WITHIN)
    assert ours.current_a_per_turn == pytest.approx(current_a, rel=WITHIN)
    assert ours.drop_v_per_turn > 0.0


@pytest.mark.parametrize(
    "topology", ["single-emitter-follower", "triple-emitter-follower", "complementary-feedback-pair"]
)
def test_slope_of_other_stages(topology: str) -> None:
    stage = _design("lower", "series", topology)
    temperatures = _temperatures(stage)
    drop_v, current_a = _differences(stage, PLACE, temperatures)
    ours = slope_at(stage, PLACE, temperatures)
    assert ours.drop_v_per_turn == pytest.approx(drop_v, rel=WITHIN)
    assert ours.current_a_per_turn == pytest.approx(current_a, rel=WITHIN)


@pytest.mark.skipif(not ngspice.installed(), reason="ngspice is not installed")
@pytest.mark.parametrize(("arm", "wiring"), ARMS)
def test_slope_at_the_target_itself(arm: str, wiring: str) -> None:
    stage = _design(arm, wiring)
    unit, travel = at_target(stage)
    temperatures = {name: float(np.ravel(celsius)[0]) for name, celsius in unit.temperatures_c.items()}
    drop_v, current_a = _differences(stage, travel, temperatures)
    ours = slope(stage)
    assert ours.travel == pytest.approx(travel)
    assert ours.drop_v_per_turn == pytest.approx(drop_v, rel=WITHIN)
    assert ours.current_a_per_turn == pytest.approx(current_a, rel=WITHIN)
