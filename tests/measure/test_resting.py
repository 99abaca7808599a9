"""At rest or not, and where the probe is: tables of readings. Mavro stands in tests/reference."""

from __future__ import annotations

import math

import numpy as np
import pytest

from benchkit.measure.resting import Placed, Probe, Rest, RestView

WINDOW_S, STEP_S, NOISE_V = 2.0, 0.1, 2e-6


def _rest(**more: float) -> Rest:
    return Rest(window_s=WINDOW_S, least=10, drift_limit=more.get("drift_limit", 5e-5), spread=2e-4)


def _noise(count: int, seed: int = 1) -> np.ndarray:
    return NOISE_V * np.random.default_rng(seed).standard_normal(count)


def _all(rest: Rest, values: np.ndarray, start_s: float = 0.0) -> list[RestView]:
    return [rest.add(start_s + STEP_S * at, float(value)) for at, value in enumerate(values)]


def test_what_stays_comes_to_rest_after_its_window() -> None:
    views = _all(_rest(), 0.02 + _noise(40))
    first = next(at for at, view in enumerate(views) if view.at_rest)
    assert first * STEP_S == pytest.approx(WINDOW_S, abs=0.11)
    assert all(view.at_rest for view in views[first:])
    assert views[first].value == pytest.approx(0.02, abs=3e-6)
    assert views[first].share == 1.0
    assert views[10].value is None
    assert views[10].why == "at rest 1.0 s of 2.0 s"
    shares = [view.share for view in views[: first + 1]]
    assert shares == sorted(shares)
    assert max(shares[:-1]) < 1.0


@pytest.mark.parametrize(("sign", "word"), [(1.0, "rising"), (-1.0, "falling")])
def test_drift_above_the_limit_is_no_rest_however_small_the_scatter(sign: float, word: str) -> None:
    values = 0.02 + sign * 7e-5 * STEP_S * np.arange(60) + 0.1 * _noise(60)
    assert np.ptp(values[:20]) < 2e-4
    views = _all(_rest(), values)
    assert not any(view.at_rest for view in views)
    assert views[-1].why == word


def test_slow_drift_below_the_limit_is_rest() -> None:
    assert _all(_rest(), 0.02 + 1e-5 * STEP_S * np.arange(60) + _noise(60))[-1].at_rest


def test_a_step_starts_the_window_again() -> None:
    rest = _rest()
    assert _all(rest, 0.02 + _noise(30))[-1].at_rest
    moved = _all(rest, 0.025 + _noise(30, 2), start_s=3.0)
    assert not moved[0].at_rest
    assert moved[0].share < 0.1
    assert moved[0].why == "it has just moved"
    assert not moved[18].at_rest
    assert moved[-1].at_rest
    assert moved[-1].value == pytest.approx(0.025, abs=3e-6)


def test_scatter_wider_than_the_spread_never_rests() -> None:
    values = 0.02 + 1e-4 * np.random.default_rng(4).standard_normal(80)
    assert not any(view.at_rest for view in _all(_rest(drift_limit=1.0), values))


def test_wandering_is_told() -> None:
    """A slow swing within the spread: its slope passes through zero, its readings hang together."""
    values = 0.02 + 4e-5 * np.sin(2.0 * np.pi * STEP_S * np.arange(200) / 2.0)
    views = _all(_rest(drift_limit=2e-5), values)
    assert not any(view.at_rest for view in views)
    assert "wanders" in {view.why.split(":")[0].removeprefix("it ") for view in views}


@pytest.mark.parametrize("step_s", [0.04, 0.1, 0.25, 0.5])
def test_the_window_holds_at_any_rate_of_readings(step_s: float) -> None:
    rest = Rest(window_s=4.0, least=5, drift_limit=5e-5, spread=2e-4)
    views = [rest.add(step_s * at, 0.02 + float(noise)) for at, noise in enumerate(_noise(200))]
    first_s = step_s * next(at for at, view in enumerate(views) if view.at_rest)
    assert 4.0 - step_s - 1e-9 <= first_s <= 4.0 + step_s


def test_too_few_readings_in_the_window_say_so() -> None:
    rest = Rest(window_s=2.0, least=6, drift_limit=1e-4, spread=2e-4)
    views = [rest.add(0.5 * at, 0.02) for at in range(20)]
    assert not any(view.at_rest for view in views)
    assert views[-1].why == "5 of 6 readings"


def test_clear_and_time_that_goes_back_forget() -> None:
    rest = _rest()
    assert _all(rest, 0.02 + _noise(30))[-1].at_rest
    rest.clear()
    assert not rest.add(3.0, 0.02).at_rest
    assert _all(rest, 0.02 + _noise(30), start_s=3.1)[-1].at_rest
    assert rest.add(1.0, 0.02).share < 0.2
    assert rest.add(1.1, math.nan) == RestView(False, 0.0, None, "no reading")


@pytest.mark.parametrize("wrong", [{"window_s": 0.0}, {"least": 2}, {"drift_limit": 0.0}, {"spread": 0.0}])
def test_what_can_not_be_is_refused(wrong: dict[str, float]) -> None:
    given: dict[str, float] = {"window_s": 2.0, "least": 10, "drift_limit": 1e-4, "spread": 1e-4} | wrong
    with pytest.raises(ValueError, match="window"):
        Rest(**given)  # type: ignore[arg-type]


def _placed(values: list[float | None], low: float | None = 0.015, high: float | None = 0.025) -> list[Placed]:
    probe = Probe(noise=NOISE_V, low=low, high=high)
    return [probe.add(STEP_S * at, value) for at, value in enumerate(values)]


HUM: list[float | None] = [0.012 * (-1) ** at for at in range(8)]
STEADY: list[float | None] = [0.02 + 1e-6 * (at % 3) for at in range(8)]


@pytest.mark.parametrize(
    ("values", "last"),
    [
        (STEADY, "on"),
        (STEADY[:2], "unknown"),
        ([], None),
        ([None] * 4, "off"),
        ([*STEADY, None], "off"),
        ([*STEADY, *HUM], "off"),
        ([*STEADY, 1e-5, -2e-5], "off"),
        ([*STEADY, 0.024], "moving"),
        ([*STEADY, *[0.024] * 4], "on"),
        ([None, None, *STEADY[:3]], "moving"),
        ([None, None, *STEADY], "on"),
        ([1e-5, 1e-5, 1e-5, *STEADY], "on"),
        ([*STEADY, float("nan")], "off"),
        ([float("inf"), *STEADY], "on"),
    ],
)
def test_where_the_probe_is(values: list[float | None], last: Placed | None) -> None:
    placed = _placed(values)
    assert (placed[-1] if placed else None) == last


@pytest.mark.parametrize(("low", "high"), [(-0.05, 0.05), (None, None), (None, 0.05)])
def test_next_to_nothing_can_be_a_reading(low: float | None, high: float | None) -> None:
    """At the output, nothing is what is wanted."""
    assert _placed([2e-4 + 1e-6 * (at % 2) for at in range(8)], low, high)[-1] == "on"


def test_drift_is_no_movement() -> None:
    assert set(_placed([0.01 + 5e-5 * at for at in range(100)])[3:]) == {"on"}


def test_clear_and_time_that_goes_back_forget_the_probe() -> None:
    probe = Probe(noise=NOISE_V)
    for at in range(6):
        probe.add(float(at), 0.02)
    assert probe.add(0.0, 0.03) == "unknown"
    for at in range(6):
        assert probe.add(1.0 + at, 0.03) in {"unknown", "on"}
    probe.clear()
    assert probe.add(0.0, 0.01) == "unknown"
