from __future__ import annotations

import math

import numpy as np
import pytest

from benchkit.measure.settling import Settling
from benchkit.session.creeping import MOST_MEANS, SINGLE, Creep, Trend, left_words, rate_words, rest_words


def test_a_trend_stays_small_and_keeps_the_last_readings_as_they_came() -> None:
    trend = Trend()
    for n in range(20_000):
        trend.add(0.1 * n, float(n))
    points = trend.points()
    assert len(points) == len(trend) <= MOST_MEANS + SINGLE + 200
    assert points[-SINGLE:] == tuple((0.1 * n, float(n)) for n in range(20_000 - SINGLE, 20_000))
    times = [t_s for t_s, _ in points]
    assert times == sorted(times)
    assert all(value == pytest.approx(t_s / 0.1, abs=1e-6) for t_s, value in points)


def test_points_since_a_moment() -> None:
    trend = Trend()
    for n in range(100):
        trend.add(float(n), 1.0)
    assert min(t_s for t_s, _ in trend.points(since_s=90.0)) >= 90.0


def test_scatter_is_found_beside_drift_and_steps() -> None:
    rng = np.random.default_rng(3)
    trend = Trend()
    assert trend.noise() == 0.0
    for n in range(60):
        trend.add(0.1 * n, 0.02 + 1e-4 * n + (5e-3 if n > 30 else 0.0) + 2e-6 * rng.standard_normal())
    assert 1e-6 < trend.noise() < 4e-6


def warm_up(t_s: float) -> float:
    return 0.022 - 0.004 * math.exp(-t_s / 60.0)


def crept(until_s: float, every_s: float = 0.5) -> Creep:
    rng = np.random.default_rng(5)
    creep = Creep("V", 0.0198, 0.0242, (60.0, 8.0), 2e-5, 0.0)
    t_s = 0.0
    while t_s <= until_s:
        creep.add(t_s, warm_up(t_s) + 2e-6 * rng.standard_normal())
        t_s += every_s
    creep.look(until_s)
    return creep


def test_a_rest_is_told_once_it_is_known() -> None:
    creep = crept(90.0)
    assert creep.rest == pytest.approx(0.022, abs=3e-4)
    told = creep.told(90.0)
    assert told.rate_text.startswith("rising ")
    assert told.rate_text.endswith("V/min")
    assert "will rest at 2" in told.settles_text
    assert told.predicted[0][0] == pytest.approx(90.0)
    assert told.predicted[-1][1] == pytest.approx(0.022, abs=4e-4)
    assert told.settles_low is not None
    assert told.settles_high is not None
    assert told.settles_low < 0.022 < told.settles_high


def test_nothing_is_told_too_early_or_after_a_move() -> None:
    creep = crept(3.0)
    assert creep.rest is None
    assert creep.told(3.0).settles_text == ""
    creep = crept(90.0)
    creep.disturbed(90.0)
    assert creep.rest is None
    assert creep.look(90.5) is None


def test_without_time_constants_nothing_is_predicted() -> None:
    creep = Creep("V", 0.0198, 0.0242, (), 2e-5, 0.0)
    for n in range(100):
        creep.add(float(n), 0.02)
    assert creep.look(100.0) is None


def test_a_prediction_is_not_made_anew_for_each_reading() -> None:
    creep = crept(60.0)
    first = creep.settling
    creep.add(60.2, warm_up(60.2))
    assert creep.look(60.2) is first
    assert creep.look(61.5) is not first


@pytest.mark.parametrize(
    ("per_s", "words"), [(2e-6, "rising 120 uV/min"), (-2e-5, "falling 1.2 mV/min"), (1e-8, "hardly moving")]
)
def test_rates_in_words(per_s: float, words: str) -> None:
    assert rate_words(per_s, "V", 1e-6) == words


@pytest.mark.parametrize(
    ("left_s", "now_s", "words"),
    [
        (100.0, 50.0, "will rest at 20.4 mV ± 200 uV, in 1 min 40 s"),
        (100.0, 90.0, "will rest at 20.4 mV ± 200 uV, in 1 min"),
        (0.0, 50.0, "rests at 20.4 mV ± 200 uV"),
        (None, 50.0, "will rest at 20.4 mV ± 200 uV"),
    ],
)
def test_a_rest_in_words(left_s: float | None, now_s: float, words: str) -> None:
    found = Settling(
        verdict="moving", now=0.02, rate=1e-6, final=0.0204, low=0.0202, high=0.0206, left_s=left_s, last_s=50.0
    )
    assert rest_words(found, "V", now_s) == words


@pytest.mark.parametrize(
    ("seconds", "words"), [(0.2, "1 s"), (59.4, "59 s"), (60.0, "1 min"), (100.0, "1 min 40 s"), (815.0, "13 min")]
)
def test_times_in_words(seconds: float, words: str) -> None:
    assert left_words(seconds) == words


def test_a_long_time_to_the_second() -> None:
    assert left_words(815.0, exact=True) == "13 min 35 s"


def test_moves_of_the_screw_among_few_readings_are_no_scatter() -> None:
    """A quick hand: three readings, a move, three readings; each move bends the row twice."""
    rng = np.random.default_rng(4)
    creep = Creep("V", 0.0198, 0.0242, (60.0, 8.0), 2e-5, 0.0)
    assert creep.noise == 0.0
    t_s = 0.0
    for value in (1e-3, 3e-3, 8e-3, 0.014, 0.02):
        creep.disturbed(t_s)
        for _ in range(3):
            t_s += 0.25
            creep.add(t_s, value + 2e-6 * rng.standard_normal())
            assert creep.noise < 8e-6
    assert creep.trend.noise() > 1e-3, "moves and readings together tell nothing"
    for _ in range(8):
        t_s += 0.25
        creep.add(t_s, 0.02 + 2e-6 * rng.standard_normal())
    assert 5e-7 < creep.noise < 8e-6
