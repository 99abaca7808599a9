"""First-order responses against differences of full solves, healthy and with hard faults."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from benchkit.circuit.netlist import Netlist
from benchkit.circuit.response import Response, _inverse
from benchkit.circuit.solution import Solution
from benchkit.circuit.solve import Compiled, Value, compile_netlist
from tests.circuit.circuits import faults, follower, spread, values_of

Array = NDArray[np.float64]

FAULTS = (
    "spreader.upper open",
    "spreader open base",
    "driver.lower ce short",
    "re.upper open",
    "output.upper reversed",
)
MOVED = (
    "spreader.upper", "re.lower", "driver.upper.IS", "output.lower.BF", "rail+.volts", "spreader.kelvin",
    "stopper.upper",
)  # fmt: skip
NODES = ("top", "bottom", "base.upper", "emitter.lower", "output")


@pytest.fixture(scope="module", params=["resistors", "sources"])
def solved(request: pytest.FixtureRequest) -> tuple[Compiled, Solution]:
    """A healthy unit, then one for each fault."""
    netlist = follower(True, request.param, faulty=True)
    circuit = compile_netlist(netlist)
    values = spread(values_of(netlist), 1 + len(FAULTS), 5)
    for name in ("spreader", "driver.upper", "driver.lower", "output.upper", "output.lower"):
        for key, default in {
            "RB": 0.0,
            "RC": 0.0,
            "RE": 0.0,
            "VAR": np.inf,
            "IKR": np.inf,
            "ISC": 0.0,
            "NC": 2.0,
        }.items():
            values.setdefault(f"{name}.{key}", np.full(1 + len(FAULTS), default))
    table = faults(netlist)
    for unit, name in enumerate(FAULTS, 1):
        single = {key: array[unit : unit + 1].copy() for key, array in values.items()}
        table[name](single)
        for key, array in single.items():
            values[key][unit] = array[0]
    solution = circuit.solve(values, 1 + len(FAULTS))
    assert solution.converged.all()
    return circuit, solution


def _moved(solution: Solution, step: float) -> dict[str, Array]:
    """Complete values with each of `MOVED` raised by a share in turn, and last the unchanged ones."""
    many = len(MOVED) + 1
    values = {key: np.tile(np.broadcast_to(v, solution.units), many) for key, v in solution.values.items()}
    for number, key in enumerate(MOVED):
        values[key][number * solution.units : (number + 1) * solution.units] *= 1.0 + step
    return values


def test_is_the_difference_of_two_full_solves(solved: tuple[Compiled, Solution]) -> None:
    circuit, solution = solved
    share, step, many = 1e-6, 1e-4, len(MOVED) + 1
    moved = Response(solution).moved(_moved(solution, share), many)
    full = [circuit.solve(_moved(solution, sign * step), many * solution.units) for sign in (1.0, -1.0)]
    for node in NODES:
        first = moved.voltage(node).reshape(many, -1)
        found = (first[:-1] - first[-1]) / share
        up, down = (one.voltage(node).reshape(many, -1)[:-1] for one in full)
        np.testing.assert_allclose(found, (up - down) / (2.0 * step), rtol=2e-3, atol=1e-3)
        assert np.abs(found).max() > 0.01
    # what is asked of a moved solution are readings too: a current moves as it does between two full solves
    current = moved.current("re.lower").reshape(many, -1)
    up, down = (one.current("re.lower").reshape(many, -1)[:-1] for one in full)
    np.testing.assert_allclose((current[:-1] - current[-1]) / share, (up - down) / (2.0 * step), rtol=5e-3, atol=1e-4)


def test_the_last_direction_stays_and_parts_are_the_whole(solved: tuple[Compiled, Solution]) -> None:
    _, solution = solved
    response, many = Response(solution), len(MOVED) + 1
    whole = response.moved(_moved(solution, 1e-6), many)
    assert np.array_equal(whole.x.reshape(-1, many, solution.units)[:, -1], solution.x)
    part = np.array([4, 1])
    values = _moved(solution.take(part), 1e-6)
    few = response.moved(values, many, part)
    np.testing.assert_array_equal(few.x.reshape(-1, many, 2), whole.x.reshape(-1, many, solution.units)[:, :, part])
    assert few.converged.tolist() == [True] * (2 * many)


def test_a_solution_that_is_moved_is_not_altered(solved: tuple[Compiled, Solution]) -> None:
    _, solution = solved
    before = solution.x.copy()
    Response(solution).moved(_moved(solution, 1e-3), len(MOVED) + 1)
    assert np.array_equal(solution.x, before)


def test_resistance_between_nodes_of_a_divider() -> None:
    netlist = Netlist()
    netlist.supply("rail", "v", "0")
    netlist.resistor("upper", "v", "middle")
    netlist.resistor("lower", "middle", "end")
    netlist.resistor("foot", "end", "0")
    units: dict[str, Value] = {
        "rail.volts": 10.0,
        "rail.limit_a": 1.0,
        "upper": [1e3, 2e3],
        "lower": 2e3,
        "foot": [1e3, 4e3],
    }
    response = Response(compile_netlist(netlist).solve(units, 2))
    np.testing.assert_allclose(response.resistance("middle", "0"), [750.0, 1500.0], rtol=1e-5)
    np.testing.assert_allclose(response.resistance("middle", "end"), [1000.0, 1500.0], rtol=1e-5)
    np.testing.assert_allclose(response.resistance("0", "middle"), response.resistance("middle", "0"))


def test_resistance_is_what_a_slight_load_shows(solved: tuple[Compiled, Solution]) -> None:
    """The voltage at the top falls by as much as a load's current times the resistance there."""
    circuit, solution = solved
    source_ohm = Response(solution).resistance("top", "output")
    load_ohm = 1e5 * source_ohm
    netlist = Netlist()
    netlist.elements = dict(circuit.netlist.elements)
    netlist.resistor("meter", "top", "output")
    loaded = compile_netlist(netlist).solve(solution.values | {"meter": load_ohm}, solution.units, solution)
    bare = solution.between("top", "output")
    assert (np.abs(bare) > 0.1).sum() >= 4
    assert source_ohm.max() > 100.0 * source_ohm.min()
    lost = bare - loaded.between("top", "output")
    np.testing.assert_allclose(lost, bare * source_ohm / (load_ohm + source_ohm), rtol=2e-3)


def test_a_singular_matrix_spoils_no_other() -> None:
    matrix = np.array([[[2.0, 0.0], [0.0, 1e-9]], [[1.0, 1.0], [1.0, 1.0]], [[np.nan, 0.0], [0.0, 1.0]]])
    inverse = _inverse(matrix)
    np.testing.assert_allclose(inverse[0], [[0.5, 0.0], [0.0, 1e9]])
    assert np.isnan(inverse[1:]).all()
