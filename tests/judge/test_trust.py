from __future__ import annotations

import pytest

from benchkit.judge.screw import KNEE_V, Scale
from benchkit.judge.trust import Kept, RailLine, Trust

TARGET_V = 0.022
SCALE = Scale(target=TARGET_V, knee=KNEE_V, floor=2e-6)
NOISE_V = 2e-6
LINE = RailLine(standing_a=0.02, per_unit=4.0)
FEEDS = RailLine(standing_a=0.5, per_unit=4.0)


@pytest.mark.parametrize(
    ("line", "value", "rail_a", "kept", "expected"),
    [
        (LINE, 0.022, 0.108, None, True),
        (LINE, 0.022, 0.135, None, True),  # within a third
        (LINE, 0.022, 0.140, None, False),
        (LINE, 0.022, 0.020, None, False),  # the reading is of a point with a drop, the supply carries no bias
        (LINE, 0.0, 0.021, None, True),
        (LINE, 0.0, 0.060, None, False),
        (LINE, 0.022, None, None, None),
        (FEEDS, 0.022, 0.588, None, None),  # feeds hide the bias
        (FEEDS, 0.0, 0.501, Kept(value=0.022, rail_a=0.588), True),
        (FEEDS, 0.0, 0.588, Kept(value=0.022, rail_a=0.588), False),
        (None, 0.022, 0.108, None, None),
        (None, 0.010, 0.108, Kept(value=0.022, rail_a=0.108), False),
        (None, 0.010, 0.060, Kept(value=0.022, rail_a=0.108), True),
        (None, 0.030, 0.060, Kept(value=0.022, rail_a=0.108), False),
        (None, 0.010, 0.104, Kept(value=0.022, rail_a=0.108), None),
    ],
)
def test_whether_the_current_agrees(
    line: RailLine | None, value: float, rail_a: float | None, kept: Kept | None, expected: bool | None
) -> None:
    assert Trust(SCALE, track=12.0, line=line).agrees(value, NOISE_V, rail_a, kept) is expected


@pytest.mark.parametrize(
    ("line", "rail_a", "expected"),
    [
        (LINE, 0.0203, 0.084),
        (LINE, 0.084, 0.084),  # the bias is still there
        (LINE, 0.010, None),  # that is neither
        (LINE, None, None),
        (FEEDS, 0.5, None),
        (None, 0.02, None),
    ],
)
def test_what_the_current_was_before_a_fall(
    line: RailLine | None, rail_a: float | None, expected: float | None
) -> None:
    found = Trust(SCALE, track=12.0, line=line).current_before(0.016, 3e-5, NOISE_V, rail_a)
    assert found == (None if expected is None else pytest.approx(expected))


@pytest.mark.parametrize(
    ("value", "rail_a", "expected"),
    [(0.0, 0.05, False), (0.0, 0.07, True), (0.022, 0.15, False), (0.022, 0.20, True), (0.0, None, False)],
)
def test_bias_that_the_reading_does_not_show(value: float, rail_a: float | None, expected: bool) -> None:
    assert Trust(SCALE, track=12.0, line=LINE).shows_more_bias(value, rail_a) is expected
    assert not Trust(SCALE, track=12.0).shows_more_bias(value, rail_a)


@pytest.mark.parametrize(
    ("step_s", "track", "after", "doubted"),
    [
        (0.1, 12.0, 0.016, False),
        (0.1, 12.0, 0.009, False),
        (0.1, 12.0, 0.002, True),
        (1.0, 12.0, 0.002, False),  # in a second a hand can do so much
        (0.1, 1.0, 0.009, True),  # not on a screw of one turn
        (0.1, 12.0, 0.01199, False),
    ],
)
def test_what_is_quicker_than_a_hand(step_s: float, track: float, after: float, doubted: bool) -> None:
    trust = Trust(SCALE, track=track)
    words = ""
    for n, value in enumerate([0.012, 0.012, after]):
        words = trust.look(
            n * step_s, value, noise=NOISE_V, slope=0.038, turned=0.25, kept=None, fell=False, rail=None
        )  # fmt: skip
    assert bool(words) is doubted


def test_the_supplys_own_reading_needs_no_probe() -> None:
    trust = Trust(SCALE, track=12.0, by_supply=True, line=LINE)
    for n, value in enumerate([0.02, 0.001, 0.02]):
        assert trust.look(0.1 * n, value, noise=0.0, slope=0.04, turned=0.0, kept=None, fell=False, rail=None) == ""
    assert "negative" in trust.look(
        0.4, -0.02, noise=0.0, slope=0.04, turned=0.0, kept=None, fell=False, rail=None
    )  # fmt: skip
