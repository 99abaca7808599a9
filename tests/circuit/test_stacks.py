"""Stacks of matrices: each unit's own answer, whatever its neighbours are."""

import numpy as np
import pytest

from benchkit.circuit.stacks import each_its_own


def _stacks(spoil: str) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(3)
    matrix, right = rng.normal(size=(9, 4, 4)) + 3.0 * np.eye(4), rng.normal(size=(9, 4, 2))
    if spoil == "singular":
        matrix[4] = 0.0
    elif spoil == "not a number":
        matrix[4, 1, 2] = np.nan
    elif spoil == "infinite":
        right[4, 1, 1] = np.inf
    return matrix, right


@pytest.mark.parametrize("spoil", ["nothing", "singular", "not a number", "infinite"])
def test_a_unit_that_has_no_answer_takes_none_from_another(spoil: str) -> None:
    matrix, right = _stacks(spoil)
    found = each_its_own(np.linalg.solve, matrix, right)
    good = np.arange(9) != 4 if spoil != "nothing" else np.ones(9, np.bool_)
    for unit in np.flatnonzero(good):
        assert matrix[unit] @ found[unit] == pytest.approx(right[unit], abs=1e-12)
    assert np.isnan(found[~good]).all()


def test_one_stack_is_enough() -> None:
    matrix, _ = _stacks("singular")
    found = each_its_own(np.linalg.inv, matrix)
    assert np.isnan(found[4]).all()
    assert found[3] @ matrix[3] == pytest.approx(np.eye(4), abs=1e-12)


def test_nothing_gives_nothing() -> None:
    assert each_its_own(np.linalg.inv, np.empty((0, 3, 3))).shape == (0, 3, 3)
