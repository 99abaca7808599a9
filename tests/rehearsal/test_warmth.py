"""Temperatures: where they come to rest, how fast, and that steps make no difference."""

from __future__ import annotations

import math

import numpy as np
import pytest

from benchkit.rehearsal.warmth import LARGEST_STEP_K, LONGEST_STEP_S, Warmth
from benchkit.stage.design import Design
from benchkit.stage.heat import heat
from benchkit.stage.points import transistors_of

POWERS = {
    "spreader.transistor": 0.02,
    "driver.upper": 0.2,
    "driver.lower": 0.15,
    "output.upper.1": 3.5,
    "output.lower.1": 3.4,
}


def test_rest_is_the_balance_that_predictions_use(tern: Design) -> None:
    warmth = Warmth(tern)
    for _ in range(3000):
        warmth.step(POWERS, LONGEST_STEP_S)
    expected = heat(tern, {name: np.array([power]) for name, power in POWERS.items()}, tern.thermal.ambient_c)
    temperatures = warmth.temperatures_c()
    assert set(temperatures) == {part.name for part in transistors_of(tern)} | {"heatsink"}
    for name, temperature in temperatures.items():
        assert temperature == pytest.approx(float(expected.temperatures_c[name][0]), abs=1e-3)


def test_the_sink_warms_as_one_time_constant(tern: Design) -> None:
    # rise = theta*P*(1 - exp(-t/(theta*C))) (arithmetic): 1.2 K/W, 400 J/K, 6.9 W.
    warmth = Warmth(tern)
    for _ in range(480):
        warmth.step(POWERS, 1.0)
    rise_k = warmth.temperatures_c()["heatsink"] - tern.thermal.ambient_c
    assert rise_k == pytest.approx(1.2 * 6.9 * -math.expm1(-1.0), rel=1e-6)
    assert warmth.highest_sink_c == pytest.approx(warmth.temperatures_c()["heatsink"])


def test_the_spreader_lags_the_sink(tern: Design) -> None:
    warmth = Warmth(tern)
    powers = dict.fromkeys(POWERS, 0.0) | {"output.upper.1": 20.0}
    for _ in range(60):
        warmth.step(powers, 1.0)
    temperatures = warmth.temperatures_c()
    ambient_c = tern.thermal.ambient_c
    seen_k = tern.thermal.spreader_tracking * (temperatures["heatsink"] - ambient_c)
    assert 0.2 * seen_k < temperatures["spreader.transistor"] - ambient_c < 0.7 * seen_k
    assert temperatures["output.upper.1"] - temperatures["heatsink"] == pytest.approx(30.0, rel=1e-3)


def test_steps_are_as_long_as_changes_allow(tern: Design) -> None:
    warmth = Warmth(tern)
    step_s = warmth.longest_step_s(POWERS)
    before = warmth.temperatures_c()
    warmth.step(POWERS, step_s)
    after = warmth.temperatures_c()
    assert max(after[name] - before[name] for name in after) == pytest.approx(LARGEST_STEP_K, rel=0.05)
    for _ in range(2000):
        warmth.step(POWERS, LONGEST_STEP_S)
    assert warmth.longest_step_s(POWERS) == LONGEST_STEP_S


def test_cooling_comes_back_to_the_ambient(tern: Design) -> None:
    warmth = Warmth(tern)
    for _ in range(100):
        warmth.step(POWERS, 10.0)
    warmth.cool(25.5)
    cooled = warmth.temperatures_c()
    assert cooled["output.upper.1"] == pytest.approx(cooled["heatsink"], abs=1e-6)
    warmth.cool(20000.0)
    for temperature in warmth.temperatures_c().values():
        assert temperature == pytest.approx(tern.thermal.ambient_c, abs=1e-6)
