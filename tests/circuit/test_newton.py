"""The recipe: what each of its parts is there for, and that a failure is called one."""

import numpy as np
import pytest

from benchkit.circuit import newton
from benchkit.circuit.equations import Batch
from benchkit.circuit.newton import LinearSolver, iterate, rescue, solve_by_gmin, solve_by_pseudo_transient
from benchkit.circuit.solve import Compiled, _Cold, compile_netlist
from tests.circuit.circuits import follower, one_fault_each, spread, values_of
from tests.circuit.residual import left_over


def batch_of(compiled: Compiled, values: dict[str, np.ndarray], units: int) -> Batch:
    given = compiled._check(values, units)
    return Batch(compiled._plan(given), given, units)


@pytest.fixture(scope="module")
def healthy() -> tuple[Compiled, Batch]:
    netlist = follower(double=True, feeds="sources")
    compiled = compile_netlist(netlist)
    return compiled, batch_of(compiled, spread(values_of(netlist), 20, 5), 20)


@pytest.mark.parametrize("attempt", [solve_by_gmin, solve_by_pseudo_transient, "softening"])
def test_each_way_leads_to_the_same_operating_point(healthy, attempt) -> None:  # type: ignore[no-untyped-def]
    _, batch = healthy
    solver, cold = LinearSolver(batch.plan.structure), _Cold(batch.plan, {})
    with np.errstate(all="ignore"):
        plain = iterate(batch, solver, *cold(batch))
        other = newton.solve_by_softening(batch, solver, cold) if attempt == "softening" else attempt(batch, solver)
    assert plain.done.all()
    assert other.done.all()
    assert other.x == pytest.approx(plain.x, rel=1e-8, abs=1e-9)


def test_an_attempt_cut_short_is_not_called_done(healthy) -> None:  # type: ignore[no-untyped-def]
    _, batch = healthy
    outcome = iterate(batch, LinearSolver(batch.plan.structure), *_Cold(batch.plan, {})(batch), most=3)
    assert not outcome.done.any()
    assert (outcome.iterations == 3).all()
    assert (outcome.residual_a > 1e-9).all()


@pytest.mark.parametrize("units", [1, 3, 40])
def test_a_circuit_without_a_solution_comes_back_unsolved(units: int) -> None:
    netlist = follower(double=False, feeds="resistors")
    netlist.unknown("ask", "output", "0", "top", "top")  # a node is never 1 V above itself
    compiled = compile_netlist(netlist)
    solution = compiled.solve(values_of(netlist) | {"ask.volts": 1.0}, units)
    assert not solution.converged.any()


@pytest.mark.parametrize(("double", "feeds"), [(True, "sources"), (True, "resistors"), (False, "sources")])
def test_hard_faults_at_current_limited_supplies_are_solved(double: bool, feeds: str) -> None:
    netlist = follower(double, feeds, faulty=True)
    units = 1000 if (double, feeds) == (True, "sources") else 300
    values, names = one_fault_each(netlist, units, seed=11)
    solution = compile_netlist(netlist).solve(values, units)
    unsolved = [names[k] for k in np.flatnonzero(~solution.converged)]
    assert len(unsolved) <= units // 1000, unsolved
    for unit in range(0, units, 3):
        if solution.converged[unit]:
            share, node = left_over(netlist, solution, unit)
            assert share < 1e-7, (names[unit], node, share)


def test_the_hard_faults_need_the_recipe() -> None:
    """Newton's method alone misses some of the units above; otherwise the tests of its rescue would test nothing."""
    netlist = follower(double=True, feeds="sources", faulty=True)
    values, _ = one_fault_each(netlist, 100, seed=11)
    batch = batch_of(compile_netlist(netlist), values, 100)
    solver, cold = LinearSolver(batch.plan.structure), _Cold(batch.plan, {})
    with np.errstate(all="ignore"):
        plain = iterate(batch, solver, *cold(batch))
    missed = np.flatnonzero(~plain.done)
    assert len(missed) > 1
    assert rescue(batch.take(missed), solver, cold).done.all()
