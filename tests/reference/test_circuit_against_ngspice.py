"""Node voltages against ngspice: within 1e-6 of the voltage + 1 uV, at several temperatures."""

from __future__ import annotations

import numpy as np
import pytest

from benchkit.circuit import devices
from benchkit.circuit.netlist import Netlist
from benchkit.circuit.solve import Solution, compile_netlist
from tests.circuit.circuits import POWER, SMALL, follower, one_fault_each, spread, transistors, values_of
from tests.reference.ngspice import run_deck


def assert_agrees(solution: Solution, reference: dict[str, float], unit: int = 0) -> None:
    for node, volts in reference.items():
        assert solution.voltage(node)[unit] == pytest.approx(volts, rel=1e-6, abs=1e-6), node


@pytest.mark.parametrize("celsius", [15, 25, 60])
@pytest.mark.parametrize("feeds", ["resistors", "sources"])
@pytest.mark.parametrize("double", [False, True], ids=["single", "double"])
def test_followers(double: bool, feeds: str, celsius: float) -> None:
    netlist = follower(double, feeds)
    values = values_of(netlist, celsius=celsius)
    solution = compile_netlist(netlist).solve(values)
    assert solution.converged.all()
    # the outputs conduct: the check is of a biased stage, not of one that is off
    assert solution.current("re.upper")[0] > 1e-3
    assert_agrees(solution, run_deck(netlist, values))


def test_devices_at_temperatures_of_their_own() -> None:
    netlist = follower(double=True, feeds="sources")
    values = values_of(netlist)
    for celsius, name in zip((25.0, 40.0, 45.0, 70.0, 90.0), transistors(netlist), strict=True):
        values[f"{name}.kelvin"] = celsius + 273.15
    assert_agrees(compile_netlist(netlist).solve(values), run_deck(netlist, values))


@pytest.mark.parametrize("unit", range(6))
def test_units_of_a_batch_one_by_one(unit: int) -> None:
    netlist = follower(double=True, feeds="sources")
    values = spread(values_of(netlist), 6, seed=21)
    solution = compile_netlist(netlist).solve(values, 6)
    assert_agrees(solution, run_deck(netlist, {k: float(v[unit]) for k, v in values.items()}), unit)


def test_a_trimmed_unit_with_the_solved_current_fed_in() -> None:
    netlist = follower(double=True, feeds="resistors")
    del netlist.elements["trimmer"]
    netlist.unknown("trimmer", "end", "bottom", "emitter.upper", "output")
    values = values_of(netlist) | {"trimmer.volts": 20e-3}
    solution = compile_netlist(netlist).solve(values)
    amps = float(solution.current("trimmer")[0])
    reference = run_deck(netlist, values, unknown_amps={"trimmer": float(f"{amps:.9g}")})
    assert reference["emitter.upper"] - reference["output"] == pytest.approx(20e-3, abs=1e-6)
    assert_agrees(solution, reference)


@pytest.mark.parametrize("kind", [SMALL, POWER], ids=["small", "power"])
@pytest.mark.parametrize("reversed_", [False, True], ids=["forward", "reverse"])
def test_one_transistor_over_its_whole_range(kind: dict[str, float], reversed_: bool) -> None:
    """Saturation, reverse operation, high injection and the leak currents, which followers hardly show."""
    n = Netlist()
    n.supply("rail", "v", "0")
    n.resistor("rb", "v", "b")
    n.resistor("rc", "v", "c")
    n.transistor("q", *(("0", "b", "c") if reversed_ else ("c", "b", "0")))
    compiled = compile_netlist(n)
    for rb, rc in ((1e7, 1e3), (1e5, 1e3), (1e3, 1e3), (1e2, 1.0), (1e4, 10.0)):
        values = {f"q.{k}": float(v) for k, v in kind.items()}
        values |= {"q.kelvin": 310.0, "rail.volts": 12.0, "rail.limit_a": 5.0, "rb": rb, "rc": rc}
        assert_agrees(compiled.solve(values), run_deck(n, values))


@pytest.mark.parametrize("amps", [1e-3, -1e-3])
def test_an_ohmmeter_across_an_unpowered_spreader(amps: float) -> None:
    n = Netlist()
    n.resistor("upper", "top", "wiper")
    n.resistor("lower", "wiper", "0")
    n.transistor("q", "top", "wiper", "0")
    n.ohmmeter("meter", *(("top", "0") if amps > 0 else ("0", "top")))
    values = {"upper": 2200.0, "lower": 680.0, "meter.amps": abs(amps), "meter.compliance_v": 6.0}
    values |= {f"q.{k}": float(v) for k, v in SMALL.items()}
    assert_agrees(compile_netlist(n).solve(values), run_deck(n, values))


@pytest.fixture
def ngspice_constants(monkeypatch: pytest.MonkeyPatch) -> None:
    """Give us ngspice's k and q (CODATA 2014, its const.h) for the exact ones of 2019: k/q differs by 3.4e-7."""
    monkeypatch.setattr(devices, "BOLTZMANN_J_PER_K", 1.38064852e-23)
    monkeypatch.setattr(devices, "ELEMENTARY_CHARGE_C", 1.6021766208e-19)


@pytest.mark.usefixtures("ngspice_constants")
def test_with_the_same_constants_a_hundred_times_closer() -> None:
    netlist = follower(double=True, feeds="sources")
    values = values_of(netlist, celsius=60.0)
    solution = compile_netlist(netlist).solve(values)
    for node, volts in run_deck(netlist, values).items():
        assert solution.voltage(node)[0] == pytest.approx(volts, rel=1e-8, abs=1e-8), node


@pytest.mark.usefixtures("ngspice_constants")
def test_hard_faults() -> None:
    """Units with a hard fault each, at current-limited supplies.

    With both supplies in limit, all that holds the circuit as a whole to 0 V is 1 uS of each. ngspice counts its 1e-12
    S beside a junction to the transport current too; at 15 V that moves such a circuit by some 8 uV (it doesn't at
    gmin=1e-14). So 20 uV here.
    """
    netlist = follower(double=True, feeds="resistors", faulty=True)
    values, names = one_fault_each(netlist, 12, seed=6)
    solution = compile_netlist(netlist).solve(values, 12)
    assert solution.converged.all()
    for unit in range(12):
        one = {key: float(array[unit]) for key, array in values.items()}
        start = {node: float(solution.voltage(node)[unit]) for node in netlist.nodes()}
        for node, volts in run_deck(netlist, one, start=start).items():
            assert solution.voltage(node)[unit] == pytest.approx(volts, rel=1e-6, abs=20e-6), (names[unit], node)
    assert len(set(names)) > 8
    assert np.ptp(solution.current("rail+")) > 0.01
