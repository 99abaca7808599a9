"""Fitting: against models whose evidence is known exactly, and units that the stage's model made itself."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import cast

import numpy as np
import pytest
from scipy.stats import multivariate_normal

from benchkit.stage.conditions import Condition
from benchkit.stage.draws import Array
from benchkit.stage.faults import HEALTHY, Fault
from benchkit.stage.fitting import ENOUGH, FARTHEST, Data, cost_of, fit, log_evidence, residual, step_from
from benchkit.stage.readouts import Index, Matrix
from benchkit.stage.unit_model import Joint, UnitModel, layout_of
from tests.stage.designs import breadboard
from tests.stage.unit_readings import POINTS, fault_of

Law = Callable[[Array], tuple[Matrix, Matrix]]


class Toy:
    """A model with a law of its own; ``most`` as the stage's model has it."""

    def __init__(self, law: Law, most: Sequence[float]) -> None:
        self.law, self.most = law, np.array(most)
        self.asked = 0

    def at(
        self,
        z: Array,
        faults: Sequence[Fault],
        start: Joint | None = None,
        effort: str = "",
        rails_v: Matrix | None = None,
        kin: Index | None = None,
    ) -> Joint:
        assert len(faults) == z.shape[1]
        self.asked += 1
        f, slope = self.law(z)
        good = np.asarray(np.isfinite(f).all(axis=1))
        return Joint(np.nan_to_num(f), slope, np.zeros_like(f), good, z.copy(), ())

    @property
    def model(self) -> UnitModel:
        return cast(UnitModel, self)


def _linear(at: Array, slope: Matrix) -> Law:
    def law(z: Array) -> tuple[Matrix, Matrix]:
        return at + (slope @ z).T, np.repeat(slope[None], z.shape[1], axis=0)

    return law


@pytest.mark.parametrize("seed", range(4))
def test_the_evidence_of_a_linear_model_is_exact(seed: int) -> None:
    """With a straight law, readings are normally distributed; scipy's density is the reference."""
    rng = np.random.default_rng(seed)
    readings, coordinates, units = 4, 6, 3
    at, slope = rng.normal(0.0, 2.0, readings), rng.normal(0.0, 1.0, (readings, coordinates))
    toy = Toy(_linear(at, slope), [np.inf] * readings)
    # a reading's own uncertainty far above what the solver is allowed to be off
    data = Data(rng.normal(0.0, 2.0, (units, readings)), rng.uniform(0.2, 1.0, (units, readings)))
    start = rng.normal(0.0, 1.0, (coordinates, units))
    found = fit(toy.model, data, [HEALTHY] * units, start, toy.at(start, [HEALTHY] * units), most_steps=20)
    for unit in range(units):
        spread = slope @ slope.T + np.diag(data.u[unit] ** 2)
        exact = multivariate_normal(at, spread).logpdf(data.y[unit])
        constant = 0.5 * readings * np.log(2.0 * np.pi)
        mine = float(found.log_evidence[unit]) - constant
        # J was not lowered below ENOUGH of its least
        assert exact - 0.5 * ENOUGH - 1e-4 <= mine <= exact + 1e-4
        best = slope.T @ np.linalg.solve(spread, data.y[unit] - at)
        left = (data.y[unit] - at - slope @ best) / data.u[unit]
        least = float((best**2).sum() + (left**2).sum())
        assert least - 1e-3 <= float(found.cost[unit]) <= least + ENOUGH


def test_one_step_of_a_linear_model_arrives() -> None:
    rng = np.random.default_rng(8)
    at, slope = rng.normal(0.0, 2.0, 3), rng.normal(0.0, 1.0, (3, 5))
    toy = Toy(_linear(at, slope), [np.inf] * 3)
    data = Data(rng.normal(0.0, 2.0, (1, 3)), np.full((1, 3), 0.5))
    z = rng.normal(0.0, 1.0, (5, 1))
    aim, promised, log_determinant = step_from(data, z, toy.at(z, [HEALTHY]), toy.most)
    there = toy.at(aim, [HEALTHY])
    assert float(cost_of(data, aim, there, toy.most)[0]) == pytest.approx(float(promised[0]), rel=1e-5)
    again, _, _ = step_from(data, aim, there, toy.most)
    np.testing.assert_allclose(again, aim, atol=1e-6)
    expected = np.linalg.slogdet(slope @ slope.T + 0.25 * np.eye(3))[1]
    assert float(log_determinant[0]) == pytest.approx(expected, rel=1e-4)
    assert float(log_evidence(data, aim, there, toy.most)[0]) == pytest.approx(
        -0.5 * (float(promised[0]) + expected), rel=1e-4
    )


def test_an_event_pulls_and_has_no_part_in_the_determinant() -> None:
    rng = np.random.default_rng(9)
    at, slope = rng.normal(0.0, 2.0, 3), rng.normal(0.0, 1.0, (3, 5))
    toy = Toy(_linear(at, slope), [np.inf] * 3)
    y, u = rng.normal(0.0, 2.0, (1, 3)), np.full((1, 3), 0.5)
    z = rng.normal(0.0, 1.0, (5, 1))
    data = Data(y, u, event=np.array([[False, True, False]]))
    aim, promised, log_determinant = step_from(data, z, toy.at(z, [HEALTHY]), toy.most)
    plain_aim, plain_promised, _ = step_from(Data(y, u), z, toy.at(z, [HEALTHY]), toy.most)
    np.testing.assert_allclose(aim, plain_aim)
    np.testing.assert_allclose(promised, plain_promised)
    two = slope[[0, 2]]
    expected = np.linalg.slogdet(two @ two.T + 0.25 * np.eye(2))[1]
    assert float(log_determinant[0]) == pytest.approx(expected, rel=1e-4)
    taken = data.take(np.array([0, 0]))
    assert taken.event is not None
    assert taken.event.tolist() == [[False, True, False]] * 2


def _bent(z: Array) -> tuple[Matrix, Matrix]:
    """One reading, exp(2 z0) + z1: bends enough that full steps overshoot."""
    f = np.exp(2.0 * z[0]) + z[1]
    return f[:, None], np.stack([2.0 * np.exp(2.0 * z[0]), np.ones(z.shape[1])], axis=1)[:, None, :]


def test_a_bent_model_is_followed_downwards_and_never_up() -> None:
    toy = Toy(_bent, [np.inf])
    data = Data(np.array([[40.0], [0.5], [3.0]]), np.full((3, 1), 1e-3))
    start = np.array([[-1.5, 1.0, 0.0], [0.0, 0.0, 0.0]])
    joint = toy.at(start, [HEALTHY] * 3)
    before = cost_of(data, start, joint, toy.most)
    found = fit(toy.model, data, [HEALTHY] * 3, start, joint, most_steps=40)
    assert (found.cost < before).all()
    np.testing.assert_allclose(found.joint.f, data.y, rtol=0.01)
    np.testing.assert_allclose(found.cost, cost_of(data, found.z, toy.at(found.z, [HEALTHY] * 3), toy.most))
    assert np.abs(found.z).max() <= FARTHEST


def test_nothing_to_gain_costs_no_solve() -> None:
    toy = Toy(_linear(np.array([1.0]), np.array([[0.5]])), [np.inf])
    z = np.zeros((1, 1))
    joint = toy.at(z, [HEALTHY])
    asked = toy.asked
    found = fit(toy.model, Data(np.array([[1.0]]), np.array([[0.1]])), [HEALTHY], z, joint)
    assert toy.asked == asked
    assert float(found.cost[0]) == pytest.approx(0.0, abs=1e-6)


def test_a_step_into_the_unsolvable_is_halved() -> None:
    """Beyond 1 the toy has no solution; the fit stays this side of it and is finite."""

    def law(z: Array) -> tuple[Matrix, Matrix]:
        f, slope = _linear(np.array([0.0]), np.array([[1.0]]))(z)
        return np.where(z.T > 1.0, np.nan, f), slope

    toy = Toy(law, [np.inf])
    z = np.zeros((1, 1))
    found = fit(toy.model, Data(np.array([[3.0]]), np.array([[0.1]])), [HEALTHY], z, toy.at(z, [HEALTHY]))
    assert 0.3 < float(found.z[0, 0]) <= 1.0
    assert np.isfinite(found.cost).all()


def test_what_has_no_solution_has_no_evidence() -> None:
    toy = Toy(lambda z: (np.full((z.shape[1], 1), np.nan), np.zeros((z.shape[1], 1, len(z)))), [np.inf])
    z = np.zeros((2, 1))
    found = fit(toy.model, Data(np.array([[3.0]]), np.array([[0.1]])), [HEALTHY], z, toy.at(z, [HEALTHY]))
    assert found.cost[0] == np.inf
    assert found.log_evidence[0] == -np.inf


def test_an_overload_counts_only_while_the_model_reads_less() -> None:
    toy = Toy(_linear(np.array([50.0, 50.0]), np.array([[30.0], [30.0]])), [100.0, np.inf])
    data = Data(np.array([[np.inf, np.inf]]), np.array([[0.1, 0.1]]))
    below, above = np.zeros((1, 1)), np.full((1, 1), 2.0)
    left, u = residual(data, toy.at(below, [HEALTHY]), toy.most)
    assert left.tolist() == [[50.0, 0.0]]
    assert u[0, 0] < 5.0
    assert u[0, 1] > 1e6
    left, u = residual(data, toy.at(above, [HEALTHY]), toy.most)
    assert left.tolist() == [[0.0, 0.0]]
    assert (u > 1e6).all()
    found = fit(toy.model, data, [HEALTHY], below, toy.at(below, [HEALTHY]))
    assert float(found.joint.f[0, 0]) > 95.0


# -- the stage's own model --------------------------------------------------------------------------------------------

COLD = Condition(positive_v=4.0, negative_v=-4.0, limit_a=0.1, trimmer="least", ambient_c=25.0)
NAMES = ("healthy", "spreader.lower: ten times low", "feed.upper: ten times high", "output.lower.1: base-emitter short")


@pytest.fixture(scope="module")
def model() -> UnitModel:
    points = [point for point in POINTS if point != "driver.resistor"]
    return UnitModel(breadboard(), layout_of([((COLD,), point) for point in points]))


def test_the_unit_that_made_the_readings_is_found(model: UnitModel) -> None:
    """The fit explains the readings at no greater cost than the unit that made them."""
    faults = [fault_of(name, breadboard()) for name in NAMES]
    z = np.random.default_rng(2).standard_normal((len(model.coordinates), len(faults)))
    truth = model.at(z, faults)
    assert truth.good.all()
    data = Data(truth.f, 3e-4 * np.abs(truth.f) + 2e-5)
    start = np.zeros_like(z)
    joint = model.at(start, faults)
    before = cost_of(data, start, joint, model.most)
    found = fit(model, data, faults, start, joint)
    assert (found.cost <= (z**2).sum(axis=0) + ENOUGH).all()
    assert (found.cost < 0.2 * before).all()
    assert (np.abs(residual(data, found.joint, model.most)[0] / data.u) < 4.0).all()


def test_one_unit_alone_is_fitted_as_among_others(model: UnitModel) -> None:
    faults = [fault_of(name, breadboard()) for name in NAMES]
    z = np.random.default_rng(2).standard_normal((len(model.coordinates), len(faults)))
    truth = model.at(z, faults)
    data = Data(truth.f, 3e-4 * np.abs(truth.f) + 2e-5)
    start = np.zeros_like(z)
    together = fit(model, data, faults, start, model.at(start, faults))
    for unit, fault in enumerate(faults):
        one = np.array([unit])
        alone = fit(model, data.take(one), [fault], start[:, one], model.at(start[:, one], [fault]))
        np.testing.assert_allclose(alone.z[:, 0], together.z[:, unit], atol=1e-3)
        np.testing.assert_allclose(alone.log_evidence, together.log_evidence[one], atol=0.01)
        mine, theirs = (one.joint.solutions[0].current("emitter.upper.1") for one in (alone, together))
        np.testing.assert_allclose(mine[0], theirs[unit], rtol=1e-4, atol=1e-9)


def test_the_evidence_prefers_the_truth(model: UnitModel) -> None:
    faults = [fault_of(name, breadboard()) for name in NAMES]
    z = np.random.default_rng(12).standard_normal((len(model.coordinates), len(faults)))
    truth = model.at(z, faults)
    many = len(faults)
    y = np.repeat(truth.f, many, axis=0)
    data = Data(y, 3e-4 * np.abs(y) + 2e-5)
    start = np.zeros((len(z), many * many))
    joint = model.at(start, faults * many)
    found = fit(model, data, faults * many, start, joint)
    assert found.log_evidence.reshape(many, many).argmax(axis=1).tolist() == list(range(many))
