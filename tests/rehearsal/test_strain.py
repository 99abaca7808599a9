"""Thermal masses: at rest as hot as the model says, quicker than it on the way, and gone when it is too much."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from benchkit.rehearsal.ratings import junction_ratings
from benchkit.rehearsal.strain import (
    JUNCTION_MARGIN_K,
    JUNCTION_NODES,
    RESISTOR_LAG_S,
    RESISTOR_MARGIN,
    Burnt,
    Strain,
)
from benchkit.rehearsal.warmth import LONGEST_STEP_S, Warmth
from benchkit.stage.design import Design
from benchkit.stage.points import transistors_of

UPPER = "output.upper.1"


def powers(tern: Design, **watts: float) -> dict[str, float]:
    by_part = {part.name: 0.0 for part in transistors_of(tern)}
    return by_part | {UPPER: watts.get("upper", 0.0), "driver.upper": watts.get("driver", 0.0)}


def cold(tern: Design) -> dict[str, float]:
    return Warmth(tern).temperatures_c()


def test_the_quick_masses_share_the_whole_resistance() -> None:
    assert sum(share for share, _ in JUNCTION_NODES) == pytest.approx(1.0)
    # The transient impedance follows the square root of the time (within a third) from 1 ms to 0.1 s.
    impedance = [sum(share * -np.expm1(-t / lag) for share, lag in JUNCTION_NODES) for t in (1e-3, 1e-2, 1e-1)]
    for early, late in itertools.pairwise(impedance):
        assert late / early == pytest.approx(10.0**0.5, rel=0.4)


def test_at_rest_it_is_as_hot_as_warmth_says(tern: Design) -> None:
    warmth, strain = Warmth(tern), Strain(tern)
    watts = powers(tern, upper=30.0, driver=0.4)
    for _ in range(2000):
        warmth.step(watts, LONGEST_STEP_S)
        strain.step(warmth.temperatures_c(), watts, {}, LONGEST_STEP_S, 0.0)
    hottest, usual = strain.hot_spots_c(warmth.temperatures_c()), warmth.temperatures_c()
    for name in (UPPER, "driver.upper"):
        assert hottest[name] == pytest.approx(usual[name], abs=0.01)


def test_a_blow_heats_the_junction_within_milliseconds(tern: Design) -> None:
    warmth, strain = Warmth(tern), Strain(tern)
    watts = powers(tern, upper=500.0)
    warmth.step(watts, 0.01)
    strain.step(warmth.temperatures_c(), watts, {}, 0.01, 0.0)
    to_case = next(rating.to_case_k_per_w for rating in junction_ratings(tern) if rating.part == UPPER)
    impedance = to_case * sum(share * -np.expm1(-0.01 / lag) for share, lag in JUNCTION_NODES)
    rise_k = strain.hot_spots_c(warmth.temperatures_c())[UPPER] - 25.0
    assert rise_k == pytest.approx(500.0 * impedance, rel=0.05)
    assert rise_k > 5.0 * (warmth.temperatures_c()[UPPER] - 25.0)


def burns_after_s(tern: Design, watts: dict[str, float], step_s: float | None) -> tuple[float, Burnt]:
    """How long a junction lasts in fixed steps, or in those that warmth and strain themselves allow."""
    warmth, strain, now_s = Warmth(tern), Strain(tern), 0.0
    while now_s < 5.0:
        seconds = step_s or strain.stands_s(warmth.temperatures_c(), watts, {}, warmth.longest_step_s(watts))
        warmth.step(watts, seconds)
        now_s += seconds
        for burnt in strain.step(warmth.temperatures_c(), watts, {}, seconds, now_s):
            return now_s, burnt
    raise AssertionError("it stands that")


@pytest.mark.parametrize("watts_upper", [300.0, 1000.0, 3000.0])
def test_it_gives_way_at_the_moment_when_fine_steps_say(tern: Design, watts_upper: float) -> None:
    watts = powers(tern, upper=watts_upper)
    took_s, burnt = burns_after_s(tern, watts, None)
    fine_s, _ = burns_after_s(tern, watts, took_s / 1000.0)
    assert took_s == pytest.approx(fine_s, rel=0.02)
    assert (burnt.part, burnt.fault, burnt.at_s) == (UPPER, "collector-emitter short", took_s)
    assert "150 degC" in burnt.why
    # One second of warmth's time constant would be far too kind to it.
    assert took_s < 0.5 * -np.log1p(-150.0 / (1.5 * watts_upper))


def test_within_its_ratings_it_stands_for_ever(tern: Design) -> None:
    strain = Strain(tern)
    watts = powers(tern, upper=60.0)
    assert strain.stands_s(cold(tern), watts, {"emitter.upper.1": 2.9}, 1e4) == 1e4
    assert strain.overloaded == {}


def test_a_resistor_opens_after_the_energy_that_its_mass_takes(tern: Design) -> None:
    strain, nothing = Strain(tern), powers(tern)
    # P*(1 - exp(-t/lag)) = margin*rating (arithmetic), for 60 W in a 3 W emitter resistor.
    expected_s = -RESISTOR_LAG_S["emitter"] * np.log1p(-RESISTOR_MARGIN * 3.0 / 60.0)
    watts = {"emitter.upper.1": 60.0}
    assert strain.stands_s(cold(tern), nothing, watts, 10.0) == pytest.approx(expected_s, rel=1e-6)
    assert strain.step(cold(tern), nothing, watts, 0.99 * expected_s, 0.0) == ()
    (burnt,) = strain.step(cold(tern), nothing, watts, 0.02 * expected_s, 0.0)
    assert (burnt.part, burnt.fault) == ("emitter.upper.1", "open")
    assert strain.step(cold(tern), nothing, watts, 1.0, 0.0) == (), "it burns once"


def test_above_the_rating_and_below_the_end_is_noted(tern: Design) -> None:
    strain = Strain(tern)
    assert strain.step(cold(tern), powers(tern), {"emitter.lower.1": 6.0}, 100.0, 0.0) == ()
    assert strain.overloaded == {"emitter.lower.1": pytest.approx(2.0, rel=1e-6)}
    hot = cold(tern) | {UPPER: 150.0 + 0.5 * JUNCTION_MARGIN_K}
    strain.step(hot, powers(tern), {}, 0.1, 0.0)
    assert strain.overloaded[UPPER] == pytest.approx(1.1)


def test_a_part_of_which_nothing_is_left_is_spared(tern: Design) -> None:
    strain = Strain(tern, frozenset({"stopper.upper.1", UPPER}))
    assert strain.step(cold(tern), powers(tern, upper=1e4), {"stopper.upper.1": 1e3}, 10.0, 0.0) == ()
