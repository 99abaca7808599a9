from __future__ import annotations

import itertools
import math
from collections.abc import Sequence

import pytest

from benchkit.measure.resting import Probe
from benchkit.session.leaving import Leaving

NOISE_V = 2e-6
LOW_V, HIGH_V = 0.0198, 0.0242

Readings = Sequence[float | None]


def left(readings: Readings, *, low: float = LOW_V, high: float = HIGH_V, step_s: float = 0.1) -> bool:
    """Whether what the readings end at counts as another point's."""
    leaving, probe = Leaving(low, high, NOISE_V), Probe(noise=NOISE_V, low=low, high=high)
    wobble = itertools.cycle([0.0, 1.0, -1.0, 0.5, -0.5])
    for n, value in enumerate(readings):
        shown = None if value is None else value + NOISE_V * next(wobble)
        leaving.add(n * step_s, shown, hums=probe.add(n * step_s, shown) == "off")
    last = readings[-1]
    assert last is not None
    return leaving.has_left(last)


def at(value: float | None, many: int = 30) -> list[float | None]:
    return [value] * many


HUM = [0.0215 + 0.02 * (-1) ** n for n in range(30)]


@pytest.mark.parametrize(
    ("readings", "expected"),
    [
        pytest.param(at(0.0215, 100), False, id="never moved"),
        pytest.param([0.0205 + 1e-5 * n for n in range(200)] + at(0.0225), False, id="drifts inside"),
        pytest.param([0.0185 + 1e-5 * n for n in range(300)] + at(0.0215), False, id="drifts in from outside"),
        pytest.param([*at(0.0215), 0.0222, *at(0.0215)], False, id="one glitch inside"),
        pytest.param([*at(0.0215), 0.5, *at(0.0215)], False, id="one glitch outside"),
        pytest.param([*at(0.0215), None, *at(0.0215)], False, id="one overload: a range change"),
        pytest.param([*at(0.0215), 0.0, 0.0, *at(0.0215)], False, id="two dropouts"),
        pytest.param([*at(0.0215), None, None, None, *at(0.0215)], False, id="three, but too short"),
        pytest.param(at(0.0215) + at(0.0222), False, id="a step inside: the unit itself"),
        pytest.param(at(0.0300) + at(0.03003), False, id="a small step outside"),
        pytest.param(at(0.0215) + at(None, 6) + at(0.0216), True, id="off and on, both inside"),
        pytest.param(at(0.0215) + at(1e-6, 6) + at(0.0216), True, id="next to nothing in between"),
        pytest.param(at(0.0215) + HUM + at(0.0216), True, id="hum in between"),
        pytest.param(at(0.0215) + at(0.6, 6) + at(0.0216), True, id="on quite another point in between"),
        pytest.param(at(0.0300) + at(0.0215), True, id="a step from outside"),
        pytest.param(at(1e-5) + at(0.0215), True, id="a step from nothing"),
        pytest.param([*at(0.03), 0.0215, *at(0.03)], False, id="a glitch from outside"),
        pytest.param([2.0 * math.exp(-n / 15) + 0.0215 for n in range(200)], False, id="charge that leaks away"),
    ],
)
def test_whether_the_probes_have_left(readings: Readings, expected: bool) -> None:
    assert left(readings) is expected


@pytest.mark.parametrize(("many", "expected"), [(2, False), (3, True)])
def test_a_slow_meter_needs_three_readings_too(many: int, expected: bool) -> None:
    assert left(at(0.0215, 10) + at(None, many) + at(0.0216, 10), step_s=1.0) is expected


def test_readings_below_zero() -> None:
    assert left(at(-0.0215) + at(None, 6) + at(-0.0216), low=-HIGH_V, high=-LOW_V)
    assert not left(at(-0.0215) + at(-0.0220), low=-HIGH_V, high=-LOW_V)
