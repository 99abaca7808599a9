from __future__ import annotations

import numpy as np
import pytest

from benchkit.stage.conditions import Condition
from benchkit.stage.draws import nominal
from benchkit.stage.heat import heat
from benchkit.stage.operate import solve_units
from tests.stage.designs import TERN, breadboard, changed, tern

WARM = Condition(positive_v=35.0, negative_v=-35.0, trimmer="target", when="warm")


def test_arithmetic() -> None:
    powers = {
        "spreader.transistor": np.array([0.02]),
        "driver.upper": np.array([0.2]),
        "driver.lower": np.array([0.1]),
        "output.upper.1": np.array([4.0]),
        "output.lower.1": np.array([6.0]),
    }
    hot = heat(tern(), powers, 20.0).temperatures_c
    assert hot["heatsink"][0] == pytest.approx(20.0 + 1.2 * 10.0)
    assert hot["output.upper.1"][0] == pytest.approx(32.0 + 1.5 * 4.0)
    assert hot["output.lower.1"][0] == pytest.approx(32.0 + 1.5 * 6.0)
    assert hot["driver.upper"][0] == pytest.approx(20.0 + 0.3 * 12.0 + 60.0 * 0.2)
    assert hot["spreader.transistor"][0] == pytest.approx(20.0 + 0.7 * 12.0 + 150.0 * 0.02)


@pytest.mark.parametrize("trimmer", ["least", "target", 0.5])
def test_a_warm_state_is_in_balance(trimmer: str | float) -> None:
    """Put back into the heat equations, the powers give the temperatures that they were solved at."""
    condition = Condition(positive_v=35.0, negative_v=-35.0, trimmer=trimmer, when="warm")  # type: ignore[arg-type]
    solved = solve_units(tern(), nominal(tern()), condition, loading="none")
    assert solved.converged.all()
    again = heat(tern(), solved.powers_w, 25.0).temperatures_c
    for part, celsius in solved.temperatures_c.items():
        assert again[part][0] == pytest.approx(celsius[0], abs=2e-3), part


def test_powers_are_those_of_the_rails() -> None:
    """Energy: supplies deliver what transistors and resistors turn into heat."""
    solved = solve_units(tern(), nominal(tern()), WARM, loading="none")
    output_w = solved.powers_w["output.upper.1"] + solved.powers_w["output.lower.1"]
    drop_v = solved.points["emitter.upper.1"][0]
    assert output_w[0] == pytest.approx(70.0 * drop_v / 0.22, rel=0.01)
    assert solved.temperatures_c["heatsink"][0] == pytest.approx(25.0 + 1.2 * output_w[0], abs=2e-3)
    assert solved.points["heatsink"][0] == solved.temperatures_c["heatsink"][0]


def test_cold_is_the_ambient() -> None:
    condition = Condition(positive_v=35.0, negative_v=-35.0, trimmer=0.5, ambient_c=31.0)
    solved = solve_units(tern(), nominal(tern()), condition, loading="none")
    assert all(value[0] == 31.0 for value in solved.temperatures_c.values())


def test_an_untracked_spreader_lets_the_bias_run_up() -> None:
    deaf = changed(TERN, ("spreader_tracking = 0.7", "spreader_tracking = 0.0"), ('heatsink = "1.2', 'heatsink = "0.6'))
    heard = changed(TERN, ('heatsink = "1.2', 'heatsink = "0.6'))
    for_both = []
    for design in (deaf, heard):
        cold = solve_units(design, nominal(design), Condition(positive_v=35, negative_v=-35, trimmer=0.5))
        warm = solve_units(design, nominal(design), Condition(positive_v=35, negative_v=-35, trimmer=0.5, when="warm"))
        assert warm.converged.all()
        for_both.append(warm.points["emitter.upper.1"][0] / cold.points["emitter.upper.1"][0])
    assert for_both[0] > 1.05 * for_both[1]


def test_runaway_is_no_state() -> None:
    runs_away = changed(
        TERN, ("spreader_tracking = 0.7", "spreader_tracking = 0.0"), ('heatsink = "1.2', 'heatsink = "8')
    )
    condition = Condition(positive_v=35.0, negative_v=-35.0, trimmer=0.6, when="warm")
    solved = solve_units(runs_away, nominal(runs_away), condition, loading="none")
    assert not solved.converged.any()


def test_given_temperatures_are_taken() -> None:
    condition = Condition(positive_v=10.0, negative_v=-10.0, trimmer=0.5, when="warm")
    at = {"spreader.transistor": 60.0, "heatsink": 55.0}
    solved = solve_units(breadboard(), nominal(breadboard()), condition, temperatures_c=at, loading="none")
    cold = solve_units(breadboard(), nominal(breadboard()), Condition(positive_v=10, negative_v=-10, trimmer=0.5))
    assert solved.points["heatsink"][0] == 55.0
    assert solved.temperatures_c["output.upper.1"][0] == 25.0
    # The spreader's VBE falls by about 2 mV/K (common practice; 1.8 to 2 mV/K at 0.7 V).
    fall = cold.points["spread.lower"][0] - solved.points["spread.lower"][0]
    assert fall / 35.0 == pytest.approx(1.85e-3, abs=0.25e-3)
