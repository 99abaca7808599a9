from __future__ import annotations

from collections.abc import Callable

import pytest

from benchkit.judge.screw import KNEE_V, Scale
from benchkit.judge.stillness import CALM_S, CALM_SHARE, Stillness

SCALE = Scale(target=0.022, knee=KNEE_V, floor=1e-6)
TOLERANCE_V = 0.0022


@pytest.mark.parametrize(
    ("value", "still"),
    [
        (lambda t_s: 0.02, True),
        (lambda t_s: 0.02 + 1e-4 * t_s, True),  # it creeps
        (lambda t_s: 0.02 + 2e-3 * t_s, False),
        (lambda t_s: 0.02 + (0.002 if t_s > 1.5 else 0.0), False),
    ],
)
def test_what_stands_still(value: Callable[[float], float], still: bool) -> None:
    one = Stillness(SCALE, TOLERANCE_V, CALM_S)
    found = [one.add(0.1 * n, value(0.1 * n), 1e-6) for n in range(20)]
    assert not any(found[:4])
    assert found[-1] is still
    assert one.last is not None
    assert one.last == pytest.approx((1.9, value(1.9)))
    one.clear()
    assert one.last is None
    assert not one.add(2.0, value(2.0), 1e-6)


def test_noise_widens_what_is_still_and_an_entry_by_hand_always_is() -> None:
    one = Stillness(SCALE, TOLERANCE_V, 0.0)
    assert one.limit(0.022, 0.0) == pytest.approx(CALM_SHARE * TOLERANCE_V * SCALE.steepness(0.022))
    assert one.limit(0.022, 1e-3) == pytest.approx(3e-3 * SCALE.steepness(0.022))
    assert one.add(0.0, 0.001, 1e-6)
    assert one.add(60.0, 0.022, 1e-6)
