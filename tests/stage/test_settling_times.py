"""Time constants of designs: against curves that come to rest, and what is left without a warm state."""

from __future__ import annotations

import numpy as np
import pytest

from benchkit.stage.conditions import Condition
from benchkit.stage.heat import heat_nodes
from benchkit.stage.settling_times import lags_of, merged
from benchkit.stage.warm_up import warm_up
from tests.stage.catalogue import few
from tests.stage.designs import TERN, breadboard, changed, tern

AT_TARGET = Condition(positive_v=35.0, negative_v=-35.0, trimmer="target")


@pytest.mark.parametrize("name", ["tern", "feedback source servo lower series 1 stopper"])
def test_the_longest_is_what_a_warm_up_ends_with(name: str) -> None:
    """The last of a warm-up curve falls by e in the longest time constant."""
    design = tern() if name == "tern" else few()[name]
    rails = design.rails
    at_target = Condition(positive_v=rails.positive_v, negative_v=rails.negative_v, trimmer="target")
    lag_s = lags_of(design)[0]
    curve = warm_up(design, at_target, until_s=12.0 * lag_s, step_error_k=1e-3)
    away_v = np.abs(curve.drop_at(np.array([2.5 * lag_s, 3.5 * lag_s]))[0] - curve.drop_at(np.array([12.0 * lag_s]))[0])
    assert np.log(away_v[0] / away_v[1]) == pytest.approx(1.0, abs=0.05)


@pytest.mark.parametrize("name", ["tern", "breadboard", *list(few())[::3]])
def test_longest_first_and_about_the_nodes_own(name: str) -> None:
    design = {"tern": tern(), "breadboard": breadboard(), **few()}[name]
    lags_s = lags_of(design)
    assert list(lags_s) == sorted(lags_s, reverse=True)
    assert len(lags_s) >= 2
    assert lags_s[0] == pytest.approx(heat_nodes(design).lag_s.max(), rel=0.3)
    assert lags_s[-1] == pytest.approx(1.0, rel=0.3)


def test_better_tracking_is_quicker() -> None:
    """A spreader that sees nothing of the sink takes nothing back: bias grows with heat and the loop is slower."""
    worse = changed(TERN, ("spreader_tracking = 0.7", "spreader_tracking = 0.2"))
    assert lags_of(worse)[0] > 1.1 * lags_of(tern())[0]


def test_without_a_warm_state_the_nodes_own_have_to_do() -> None:
    bad = changed(TERN, ("spreader_tracking = 0.7", "spreader_tracking = 0.0"), ('heatsink = "1.2', 'heatsink = "8'))
    assert lags_of(bad, AT_TARGET) == merged(heat_nodes(bad).lag_s)


def test_lower_rails_have_their_own() -> None:
    low = lags_of(tern(), Condition(positive_v=10.0, negative_v=-10.0, trimmer="target"))
    assert low[0] != lags_of(tern())[0]
    assert lags_of(tern()) is lags_of(tern())


@pytest.mark.parametrize(
    ("lags_s", "found"),
    [
        ([1.0, 300.0, 30.0], (300.0, 30.0, 1.0)),
        ([1.0, 1.0, 1.0], (1.0,)),
        ([10.0, 11.0, 100.0], (100.0, 110.0**0.5)),
    ],
)
def test_alike_ones_are_one(lags_s: list[float], found: tuple[float, ...]) -> None:
    assert merged(np.array(lags_s)) == pytest.approx(found)
