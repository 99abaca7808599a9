"""Solutions as collections of units: taking, joining, putting."""

from __future__ import annotations

import numpy as np

from benchkit.circuit.netlist import Netlist
from benchkit.circuit.solution import Solution
from benchkit.circuit.solve import Value, compile_netlist


def _divider(upper_ohm: list[float]) -> Solution:
    netlist = Netlist()
    netlist.supply("rail", "v", "0")
    netlist.resistor("upper", "v", "middle")
    netlist.resistor("lower", "middle", "0")
    values: dict[str, Value] = {"rail.volts": 10.0, "rail.limit_a": 1.0, "upper": upper_ohm, "lower": 1e3}
    return compile_netlist(netlist).solve(values, len(upper_ohm))


def test_units_taken_joined_and_put() -> None:
    first, second = _divider([1e3, 3e3]), _divider([4e3, 9e3, 19e3])
    both = first.joined(second)
    np.testing.assert_allclose(both.voltage("middle"), [5.0, 2.5, 2.0, 1.0, 0.5], rtol=1e-4)
    some = both.take(np.array([4, 0]))
    np.testing.assert_allclose(some.current("upper"), [0.5e-3, 5e-3], rtol=1e-4)
    some.put(np.array([0]), both, np.array([2]))
    np.testing.assert_allclose(some.voltage("middle"), [2.0, 5.0], rtol=1e-4)
    np.testing.assert_allclose(some.current("upper"), [2e-3, 5e-3], rtol=1e-4)
    np.testing.assert_allclose(both.voltage("middle"), [5.0, 2.5, 2.0, 1.0, 0.5], rtol=1e-4)


def test_one_unit_put_into_one_brings_its_values() -> None:
    one, other = _divider([1e3]), _divider([9e3])
    one.put(np.array([0]), other, np.array([0]))
    np.testing.assert_allclose(one.current("upper"), other.current("upper"))
    assert one.values["upper"][0] == 9e3
