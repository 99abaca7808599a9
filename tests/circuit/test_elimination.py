import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from benchkit.circuit.elimination import Factors, Structure, choose_order, linear_residual, solve_dense
from benchkit.circuit.newton import DENSE_UP_TO, LinearSolver


def random_system(size: int, units: int, seed: int) -> tuple[Structure, np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    entries = {(k, int(p)) for k, p in enumerate(rng.permutation(size))}  # never structurally singular
    entries |= {(int(i), int(j)) for i, j in rng.integers(0, size, (3 * size, 2))}
    structure = Structure(size, entries)
    values = rng.normal(size=(structure.slots, units)) * 10.0 ** rng.integers(-3, 4, (structure.slots, 1))
    return structure, values, rng.normal(size=(size, units))


def full(structure: Structure, values: np.ndarray, unit: int) -> np.ndarray:
    matrix = np.zeros((structure.size, structure.size))
    matrix[structure.rows, structure.columns] = values[:, unit]
    return matrix


@given(size=st.integers(1, 14), seed=st.integers(0, 10**6))
@example(size=11, seed=215)
@settings(max_examples=60, deadline=None)
def test_the_solver_satisfies_the_equations_of_every_unit(size: int, seed: int) -> None:
    structure, values, right = random_system(size, 40, seed)
    x = LinearSolver(structure).solve(values, right)
    for unit in range(40):
        matrix = full(structure, values, unit)
        if np.linalg.cond(matrix) < 1e10:
            terms = np.abs(matrix) @ np.abs(x[:, unit]) + np.abs(right[:, unit])
            assert (np.abs(matrix @ x[:, unit] - right[:, unit]) <= 1e-8 * terms).all()


@given(size=st.integers(2, 12), seed=st.integers(0, 10**6))
@settings(max_examples=40, deadline=None)
def test_an_order_chosen_on_a_unit_solves_that_unit(size: int, seed: int) -> None:
    structure, values, right = random_system(size, 1, seed)
    if np.linalg.cond(full(structure, values, 0)) > 1e8:
        return
    x = Factors(choose_order(structure, values), values).solve(right)
    residual, scale = linear_residual(structure, values, x, right)
    assert (np.abs(residual) <= 1e-8 * scale).all()


def test_the_order_avoids_fill() -> None:
    # an arrow: eliminated from its head it fills completely, from its shaft not at all
    size = 10
    entries = {(k, k) for k in range(size)} | {(0, k) for k in range(size)} | {(k, 0) for k in range(size)}
    structure = Structure(size, entries)
    values = np.where(structure.rows == structure.columns, 4.0, 1.0)[:, None]
    assert choose_order(structure, values).slots == structure.slots


def test_a_tiny_pivot_is_not_taken_whatever_it_saves() -> None:
    structure = Structure(2, {(0, 0), (0, 1), (1, 0), (1, 1)})
    values = np.array([[1e-12], [1.0], [1.0], [1.0]])
    first = choose_order(structure, values).steps[0]
    assert (first.row, first.column) != (0, 0)


def test_units_that_the_first_order_is_bad_for_are_solved_by_another() -> None:
    structure = Structure(2, {(0, 0), (0, 1), (1, 0), (1, 1)})
    units = 200
    values = np.repeat([[1.0], [1e-3], [1e-3], [1.0]], units, axis=1)
    odd = np.arange(units) % 20 == 7  # never among the units that the first order is chosen on
    values[:, odd] = [[1e-17], [1.0], [1.0], [1e-17]]
    solver = LinearSolver(structure)
    right = np.ones((2, units)) * [[1.0], [2.0]]
    x = solver.solve(values, right)
    expected = np.array([np.linalg.solve(full(structure, values, u), right[:, u]) for u in range(units)]).T
    assert x == pytest.approx(expected, rel=1e-12)


def test_a_singular_unit_spoils_no_other() -> None:
    structure = Structure(2, {(0, 0), (0, 1), (1, 0), (1, 1)})
    for units in (3, DENSE_UP_TO + 30):
        values = np.repeat([[2.0], [1.0], [1.0], [2.0]], units, axis=1)
        values[:, 1] = 1.0
        with np.errstate(all="ignore"):
            x = LinearSolver(structure).solve(values, np.ones((2, units)))
        others = np.arange(units) != 1
        assert x[:, others] == pytest.approx(np.full((2, units - 1), 1 / 3))


def test_the_dense_solution_does_not_care_about_the_scale_of_rows() -> None:
    structure, values, right = random_system(6, 5, 3)
    scale = 10.0 ** np.array([-9, 9, 0, 3, -3, 6.0])
    plain = solve_dense(structure, values, right)
    scaled = solve_dense(structure, values * scale[structure.rows][:, None], right * scale[:, None])
    assert scaled == pytest.approx(plain, rel=1e-9)


def test_a_structurally_singular_matrix_is_refused() -> None:
    structure = Structure(2, {(0, 0), (1, 0)})
    with pytest.raises(np.linalg.LinAlgError, match="structurally singular"):
        choose_order(structure, np.ones((2, 1)))
