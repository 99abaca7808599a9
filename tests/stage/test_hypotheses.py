"""Libraries of hypotheses, and fitting all of them to sets of readings."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from benchkit.stage.conditions import Condition, Unpowered
from benchkit.stage.faults import HEALTHY, faults_of
from benchkit.stage.fitting import Data
from benchkit.stage.forcing import Held
from benchkit.stage.hypotheses import Library, fit_hypotheses, joined, library
from benchkit.stage.observations import Conditions
from benchkit.stage.unit_model import layout_of
from tests.stage.catalogue import few
from tests.stage.designs import breadboard
from tests.stage.unit_readings import FLOOR, POINTS, SHARE, fault_of

COLD = Condition(positive_v=4.0, negative_v=-4.0, limit_a=0.1, trimmer="least", ambient_c=25.0)
OHMS: tuple[tuple[Conditions, str], ...] = tuple(
    ((Unpowered(point=point, trimmer="least"),), point) for point in ("ohm.rails", "ohm.spreader.lower")
)
POWERED: tuple[tuple[Conditions, str], ...] = tuple(((COLD,), point) for point in POINTS if point != "driver.resistor")
PLANTED = ("healthy", "spreader.lower: ten times low", "output.upper.1: base-emitter short", "feed.lower: open")


@pytest.fixture(scope="module")
def lib() -> Library:
    return library(breadboard(), layout_of(POWERED))


def _data(lib: Library, seed: int = 4) -> Data:
    """Readings of a drawn unit for each planted fault, without noise."""
    faults = [fault_of(name, breadboard()) for name in PLANTED]
    z = np.random.default_rng(seed).standard_normal((len(lib.model.coordinates), len(faults)))
    made = lib.model.at(z, faults, effort="full")
    assert made.good.all()
    return Data(made.f, SHARE * np.abs(made.f) + FLOOR)


def test_a_library_holds_every_fault_and_healthy_first(lib: Library) -> None:
    assert lib.faults == (HEALTHY, *faults_of(breadboard()))
    many = len(lib.faults)
    assert len(lib.whose) == lib.z.shape[1] == len(lib.joint.good)
    assert len(lib.whose) % many == 0
    assert len(lib.whose) >= 2 * many
    assert (lib.whose.reshape(-1, many) == np.arange(many)).all()
    assert (lib.z[:, :many] == 0.0).all()
    assert np.exp(lib.log_prior).sum() == pytest.approx(1.0)
    assert lib.log_prior.argmax() == 0


def test_its_members_read_what_the_model_says(lib: Library) -> None:
    some = np.array([0, 7, len(lib.faults) + 3, len(lib.whose) - 1])
    some = some[lib.joint.good[some]]
    assert len(some) >= 3
    found = lib.model.at(lib.z[:, some], [lib.faults[k] for k in lib.whose[some]], effort="full")
    np.testing.assert_allclose(found.f, lib.joint.f[some], rtol=1e-6, atol=1e-8)
    assert [str(solution.units) for solution in lib.joint.solutions] == [str(len(lib.whose))]


def test_it_is_made_once_and_always_the_same(lib: Library) -> None:
    assert library(breadboard(), layout_of(POWERED)) is lib
    again = Library(breadboard(), layout_of(POWERED))
    np.testing.assert_array_equal(again.joint.f, lib.joint.f)
    np.testing.assert_array_equal(again.joint.slope, lib.joint.slope)


def test_unpowered_readings_are_joined_point_after_point() -> None:
    lib = library(breadboard(), layout_of(OHMS))
    one, other = lib.joint.take(np.array([3, 0])), lib.joint.take(np.array([5]))
    both = joined(one, other)
    index = np.array([3, 0, 5])
    np.testing.assert_array_equal(both.f, lib.joint.f[index])
    faults = [lib.faults[k] for k in lib.whose[index]]
    again = lib.model.at(lib.z[:, index], faults, both)
    np.testing.assert_allclose(again.f, lib.joint.f[index], rtol=1e-7)
    np.testing.assert_array_equal(both.take(np.array([2])).f, other.f)
    assert max(int(solution.iterations.max()) for solution in again.solutions) <= 3


def test_units_with_held_rails_have_rows_of_their_own() -> None:
    """Solved as one batch, each as in a library for it alone; the rails are where they are held."""
    limited = Held(**vars(replace(COLD, limit_a=5.0)), held=(True, True))
    layout = layout_of([((limited,), point) for point in ("rail+", "rail-", "spread", "rail+.current")])
    rails_v = np.array([[[1.9, -0.7]], [[1.3, -6.0]]])
    both = Library(breadboard(), layout, rails_v)
    many = len(both.faults)
    assert len(both.whose) == both.z.shape[1] == len(both.joint.good) == sum(s.units for s in both.joint.solutions)
    assert both.rows(0).stop == both.rows(1).start
    assert both.rows(1).stop == len(both.whose)
    for number in range(2):
        alone = Library(breadboard(), layout, rails_v[[number]])
        z, joint = both.view(number)
        np.testing.assert_array_equal(z, alone.z)
        np.testing.assert_array_equal(joint.good, alone.joint.good)
        assert joint.good.mean() > 0.95
        np.testing.assert_allclose(joint.f, alone.joint.f, rtol=1e-6, atol=1e-9)
        # but for a hypothesis or two that is a short, and takes the limit's current even so
        stand = np.isclose(joint.f[:many, :2], rails_v[number], rtol=0.01).all(axis=1)
        assert stand[0]
        assert stand.mean() > 0.9


def test_the_planted_hypothesis_wins_or_is_as_good(lib: Library) -> None:
    found = fit_hypotheses(lib, _data(lib))
    assert found.log_posterior.shape == (len(PLANTED), len(lib.faults))
    assert (found.log_posterior.max(axis=1) == 0.0).all()
    for number, name in enumerate(PLANTED):
        planted = lib.faults.index(fault_of(name, breadboard()))
        # a fault that reads the same may stand before it by the ratio of their priors, no more
        prior = lib.log_prior - lib.log_prior[planted]
        first = int(found.log_posterior[number].argmax())
        assert found.log_posterior[number, planted] > -abs(prior[first]) - 1.5, name
        assert found.row[number, planted] >= 0
        assert found.row[number, first] >= 0


def test_what_was_fitted_stands_by_its_own_evidence(lib: Library) -> None:
    found = fit_hypotheses(lib, _data(lib))
    for number in range(len(PLANTED)):
        fitted = np.flatnonzero(found.row[number] >= 0)
        by_fit = found.fit.log_evidence[found.row[number, fitted]] + lib.log_prior[fitted]
        shown = found.log_posterior[number, fitted]
        usable = np.isfinite(by_fit)
        assert usable.sum() >= 2
        np.testing.assert_allclose((shown - by_fit)[usable], (shown - by_fit)[usable][0], atol=1e-6)


def test_sets_together_are_as_each_alone(lib: Library) -> None:
    data = _data(lib).take(np.array([0, 2]))
    together = fit_hypotheses(lib, data).log_posterior
    for number in range(2):
        alone = fit_hypotheses(lib, data.take(np.array([number]))).log_posterior[0]
        likely = alone > -20.0
        np.testing.assert_allclose(together[number, likely], alone[likely], atol=0.05)


def test_the_library_is_not_altered_by_fitting(lib: Library) -> None:
    f, x = lib.joint.f.copy(), lib.joint.solutions[0].x.copy()
    fit_hypotheses(lib, _data(lib, 9))
    np.testing.assert_array_equal(lib.joint.f, f)
    np.testing.assert_array_equal(lib.joint.solutions[0].x, x)


def test_readings_that_nothing_explains_leave_finite_numbers(lib: Library) -> None:
    """All rails right, and every other reading absurd: no hypothesis fits, one must still be first."""
    data = _data(lib).take(np.array([0]))
    y = data.y.copy()
    y[:, 4:] = 3.3
    found = fit_hypotheses(lib, Data(y, data.u))
    assert not np.isnan(found.log_posterior).any()
    assert (found.log_posterior.max(axis=1) == 0.0).all()


def test_a_fault_that_is_hard_to_solve_is_a_hypothesis_too() -> None:
    """With the spreader shorted, or without a feed, nothing conducts: quick ways find no state of such a stage."""
    design = few()["double resistor servo upper tied 1 stopper one supply"]
    condition = Condition(positive_v=60.0, negative_v=0.0, limit_a=0.18, trimmer="unknown")
    lib = Library(design, layout_of([((condition,), "output")]))
    assert lib.joint.good.reshape(-1, len(lib.faults)).any(axis=0).all()
