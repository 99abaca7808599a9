"""The saturating curve: starts that don't matter, edges. Published values stand in tests/reference."""

from __future__ import annotations

import numpy as np
import pytest

from benchkit.measure.saturating import fit_saturating

X = np.linspace(1.0, 50.0, 40)
Y = 3.0 * (1.0 - np.exp(-0.07 * X)) + 0.01 * np.random.default_rng(6).standard_normal(40)


@pytest.mark.parametrize("b2", [1e-4, 1e-2, 0.07, 1.0, 30.0])
@pytest.mark.parametrize("b1", [-5.0, 0.0, 3.0, 1e6])
def test_starts_do_not_matter(b1: float, b2: float) -> None:
    found = fit_saturating(X, Y, (b1, b2))
    assert found.converged
    assert found.b1 == pytest.approx(3.0, abs=4.0 * found.u_b1)
    assert found.b2 == pytest.approx(0.07, abs=4.0 * found.u_b2)
    assert found.residual_deviation == pytest.approx(0.01, rel=0.4)
    assert found.at(X) == pytest.approx(Y, abs=0.04)
    assert found.b1 == pytest.approx(fit_saturating(X, Y, (3.0, 0.07)).b1, rel=1e-6)


def test_an_exact_curve_is_found_exactly() -> None:
    found = fit_saturating(X, -2.0 * (1.0 - np.exp(-0.2 * X)), (1.0, 0.05))
    assert [found.b1, found.b2] == pytest.approx([-2.0, 0.2], rel=1e-9)
    assert found.residual_deviation < 1e-9


@pytest.mark.parametrize("y", [np.zeros(40), 0.5 * X])
def test_what_has_no_end_is_no_trap(y: np.ndarray) -> None:
    """A straight line saturates nowhere: the fit ends all the same, and warns of nothing."""
    found = fit_saturating(X, y, (1.0, 0.1))
    assert np.isfinite(found.b2)
    assert found.at(X) == pytest.approx(y, abs=0.02)


@pytest.mark.parametrize(
    ("x", "y", "start", "words"),
    [
        ([1.0, 2.0], [1.0, 2.0], (1.0, 1.0), "three or more"),
        ([1.0, 2.0, 3.0], [1.0, 2.0], (1.0, 1.0), "as many of both"),
        ([1.0, 2.0, 3.0], [1.0, float("nan"), 2.0], (1.0, 1.0), "all of them numbers"),
        ([1.0, 2.0, 3.0], [1.0, 2.0, 2.5], (1.0, 0.0), "above zero"),
        ([1.0, 2.0, 3.0], [1.0, 2.0, 2.5], (float("nan"), 1.0), "wanted a number"),
    ],
)
def test_what_can_not_be_is_refused(x: list[float], y: list[float], start: tuple[float, float], words: str) -> None:
    with pytest.raises(ValueError, match=words):
        fit_saturating(x, y, start)
