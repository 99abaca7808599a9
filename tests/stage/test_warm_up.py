"""Warm-up curves against a fine-step integration of the same equations by scipy, and what is read off them."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design
from benchkit.stage.draws import Array, draw, nominal, seeds
from benchkit.stage.electrothermal import warm_state
from benchkit.stage.heat import heat_nodes
from benchkit.stage.operate import Solved, solve_units
from benchkit.stage.warm_up import WarmUp, _phis, warm_up
from tests.stage.catalogue import few
from tests.stage.designs import TERN, breadboard, changed, tern

END_S = 1200.0


class _Fine:
    """The nodes' equations, written down once more, with the operating point solved at every evaluation."""

    def __init__(self, design: Design, travel: float) -> None:
        self.design, self.travel = design, travel
        self.last: Solved | None = None
        thermal = design.thermal
        self.condition = Condition(
            positive_v=design.rails.positive_v, negative_v=design.rails.negative_v, trimmer=travel
        )
        self.lags = heat_nodes(design).lag_s
        self.thermal = thermal

    def solved(self, x: Array) -> Solved:
        """The circuit with the spreader first, then drivers, then output devices, and the sink last in x."""
        thermal, names = self.thermal, heat_nodes(self.design).names
        sink_k = x[-1]
        celsius = {"heatsink": thermal.ambient_c + sink_k}
        for name, own_k in zip(names[:-1], x[:-1], strict=True):
            if name.startswith("output"):
                seen_k = sink_k
            elif name.startswith("spreader"):
                seen_k = 0.0 if thermal.spreader_lag_s else thermal.spreader_tracking * sink_k
            else:
                seen_k = (thermal.driver_tracking or 0.0) * sink_k
            celsius[name] = thermal.ambient_c + seen_k + own_k
        self.last = solve_units(
            self.design, nominal(self.design), self.condition, temperatures_c=celsius, start=self.last, loading="none"
        )
        return self.last

    def __call__(self, seconds: float, x: Array) -> Array:
        thermal, names = self.thermal, heat_nodes(self.design).names
        powers = {name: float(power[0]) for name, power in self.solved(x).powers_w.items()}
        goals = []
        for name in names[:-1]:
            if name.startswith("output"):
                goals.append(thermal.junction_to_heatsink_k_per_w * powers[name])
            elif name.startswith("spreader"):
                tracked_k = thermal.spreader_tracking * x[-1] if thermal.spreader_lag_s else 0.0
                goals.append(thermal.spreader_to_ambient_k_per_w * powers[name] + tracked_k)
            else:
                goals.append(thermal.driver_to_ambient_k_per_w * powers[name])
        on_sink_w = sum(power for name, power in powers.items() if name.startswith("output"))
        goals.append(thermal.heatsink_k_per_w * on_sink_w)
        return np.asarray((np.array(goals) - x) / self.lags)

    def drop_v(self, x: Array) -> float:
        return float(self.solved(x).points["emitter.pair.1"][0]) / 2.0


@pytest.mark.parametrize(("name", "travel"), [("tern", 0.55), ("breadboard", 0.6)])
def test_the_curve_is_that_of_a_fine_integration(name: str, travel: float) -> None:
    design = {"tern": tern(), "breadboard": breadboard()}[name]
    fine = _Fine(design, travel)
    truth = solve_ivp(
        fine, (0.0, END_S), np.zeros(len(heat_nodes(design).names)), method="BDF", rtol=1e-6, atol=1e-5,
        dense_output=True,
    )  # fmt: skip
    curve = warm_up(design, fine.condition, until_s=END_S)
    assert truth.sol is not None
    times_s = np.concatenate([np.geomspace(0.05, END_S, 25), [0.0]])
    drops_v = np.array([fine.drop_v(truth.sol(at)) for at in times_s])
    assert curve.drop_at(times_s)[0] == pytest.approx(drops_v, rel=2e-4)
    sink_c = design.thermal.ambient_c + truth.sol(curve.times_s)[-1]
    assert curve.celsius[-1, 0] == pytest.approx(sink_c, abs=5e-3)


def test_a_finer_step_changes_nothing() -> None:
    condition = Condition(positive_v=35.0, negative_v=-35.0, trimmer="target")
    coarse, fine = warm_up(tern(), condition), warm_up(tern(), condition, step_error_k=1e-3)
    times_s = np.geomspace(0.05, 3000.0, 60)
    assert coarse.drop_at(times_s) == pytest.approx(fine.drop_at(times_s), rel=1e-4)
    assert coarse.settled_s() == pytest.approx(fine.settled_s(), rel=0.01)


@pytest.mark.parametrize("name", few())
def test_the_end_is_the_warm_state(name: str) -> None:
    design = few()[name]
    trimmer = "target" if design.spreader.trimmer is not None else "unknown"
    rails = design.rails
    condition = Condition(positive_v=rails.positive_v, negative_v=rails.negative_v, trimmer=trimmer)  # type: ignore[arg-type]
    curve = warm_up(design, condition)
    state = warm_state(design, nominal(design), condition)
    assert np.isfinite(curve.rest_s[0])
    assert curve.final_v[0] == pytest.approx(state.drop_v[0], rel=2e-4)
    assert curve.celsius[-1, 0, -1] == pytest.approx(state.temperatures_c["heatsink"][0], abs=0.02)
    cold = solve_units(design, nominal(design), condition, position=state.travel, loading="none")
    assert curve.cold_v[0] == pytest.approx(cold.points["emitter.pair.1"][0] / 2.0, rel=1e-6)


def test_up_and_then_down() -> None:
    design = few()["feedback source servo lower series 1 stopper"]
    condition = Condition(positive_v=design.rails.positive_v, negative_v=design.rails.negative_v, trimmer="target")
    curve = warm_up(design, condition)
    at_s, top_v = curve.peak()
    dense_s = np.linspace(0.0, curve.times_s[-1], 40_000)
    dense_v = curve.drop_at(dense_s)[0]
    assert top_v == pytest.approx(dense_v.max(), rel=1e-6)
    assert at_s == pytest.approx(dense_s[dense_v.argmax()], rel=0.02)
    assert top_v > 1.02 * curve.final_v[0]
    outside = np.abs(dense_v / curve.final_v[0] - 1.0) > 0.01
    assert curve.settled_s() == pytest.approx(dense_s[np.flatnonzero(outside)[-1]], abs=2.0)
    assert "up to" in curve.told()


def test_units_go_their_own_ways() -> None:
    parameters = draw(tern(), 6, seeds("unit", 2))
    condition = Condition(positive_v=35.0, negative_v=-35.0, trimmer="target")
    together = warm_up(tern(), condition, parameters)
    assert together.units == 6
    assert together.final_v == pytest.approx(np.full(6, 0.022), rel=2e-4)
    assert together.travel is not None
    one = {key: value if value.ndim == 0 else value[3] for key, value in parameters.items()}
    alone = warm_up(tern(), condition, one)
    times_s = np.geomspace(0.1, 2000.0, 30)
    assert together.drop_at(times_s)[3] == pytest.approx(alone.drop_at(times_s)[0], rel=1e-4)


def test_running_away_is_named_with_its_time() -> None:
    design = changed(TERN, ("spreader_tracking = 0.7", "spreader_tracking = 0.0"), ('heatsink = "1.2', 'heatsink = "4'))
    curve = warm_up(design, Condition(positive_v=35.0, negative_v=-35.0, trimmer=0.6))
    assert np.isnan(curve.rest_s[0])
    assert np.isnan(curve.final_v[0])
    assert np.isnan(curve.settled_s())
    at_s = float(curve.runs_away_s[0])
    hottest_c = curve.celsius[:-1, 0].max(axis=0)
    assert hottest_c[curve.times_s < 0.98 * at_s].max() < 150.0
    assert hottest_c.max() >= 150.0
    assert "runs away" in curve.told()


def test_a_supply_limit_stops_it() -> None:
    design = changed(TERN, ("spreader_tracking = 0.7", "spreader_tracking = 0.0"), ('heatsink = "1.2', 'heatsink = "4'))
    curve = warm_up(design, Condition(positive_v=35.0, negative_v=-35.0, trimmer=0.6, limit_a=0.2))
    assert np.isfinite(curve.rest_s[0])
    assert np.isnan(curve.runs_away_s[0])


def test_still_on_its_way() -> None:
    curve = warm_up(tern(), Condition(positive_v=35.0, negative_v=-35.0, trimmer=0.5), until_s=60.0)
    assert curve.times_s[-1] == 60.0
    assert np.isnan(curve.final_v[0])
    assert "not yet at rest" in curve.told()


def test_phi_functions() -> None:
    """phi1(z) = (e^z - 1)/z, phi3(z) = (e^z - 1 - z - z^2/2)/z^3, on matrices that are not symmetric."""
    rng = np.random.default_rng(4)
    turn = rng.normal(size=(3, 3))
    values = np.array([-500.0, -1.0, 0.3])
    matrix = turn @ np.diag(values) @ np.linalg.inv(turn)
    push = rng.normal(size=3)
    low, correction = _phis(matrix[None], push[None], 2.0)
    z = 2.0 * values
    phi1 = np.expm1(z) / z
    phi3 = (np.expm1(z) - z - z**2 / 2.0) / z**3
    assert low[0] == pytest.approx(2.0 * turn @ np.diag(phi1) @ np.linalg.inv(turn) @ push, rel=1e-9)
    assert correction[0] == pytest.approx(4.0 * turn @ np.diag(phi3) @ np.linalg.inv(turn), rel=1e-8, abs=1e-11)


def test_a_curve_that_is_flat_settles_at_once() -> None:
    flat = WarmUp(
        design=tern(), condition=Condition(positive_v=1.0, negative_v=-1.0), travel=None,
        times_s=np.array([0.0, 10.0]), drop_v=np.full((1, 2), 0.02), drop_slope=np.zeros((1, 2)),
        celsius=np.full((1, 1, 2), 25.0), names=("heatsink",), rest_s=np.array([10.0]), runs_away_s=np.array([np.nan]),
    )  # fmt: skip
    assert flat.settled_s() == 0.0
    assert "at once" in flat.told()


def test_a_curve_goes_on_from_its_own_temperatures() -> None:
    """Stopped on its way and taken up again, it is the same curve."""
    condition = Condition(positive_v=35.0, negative_v=-35.0, trimmer=0.5)
    whole, first = warm_up(tern(), condition, until_s=400.0), warm_up(tern(), condition, until_s=100.0)
    second = warm_up(tern(), condition, until_s=300.0, from_c=first.celsius[:, :, -1])
    times_s = np.linspace(0.0, 300.0, 20)
    assert second.drop_at(times_s)[0] == pytest.approx(whole.drop_at(100.0 + times_s)[0], rel=2e-4)


def test_who_has_arrived_stays() -> None:
    """Units that are at rest early don't move while others are still on their way, between the steps either."""
    parameters = draw(breadboard(), 12, seeds("unit", 5))
    condition = Condition(positive_v=10.0, negative_v=-10.0, trimmer="target")
    rested = warm_up(breadboard(), condition, parameters)
    moved = np.asarray(rested.travel) + np.geomspace(1e-5, 1e-1, 12)
    again = warm_up(breadboard(), condition, parameters, travel=moved, from_c=rested.celsius[:, :, -1])
    assert np.ptp(again.rest_s) > 100.0
    dense_s = np.linspace(0.0, again.times_s[-1], 3000)
    dense_v = again.drop_at(dense_s)
    moved_v = [np.ptp(row[dense_s >= rest_s]) for row, rest_s in zip(dense_v, again.rest_s, strict=True)]
    assert max(moved_v) < 1e-8
