"""The way of both rails: together, in small steps, never late into a bigger one, exactly to the end."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit.keeper.ramp import STEP_S, Ramp


def steps_of(ramp: Ramp, from_v: tuple[float, float]) -> list[tuple[float, float]]:
    ramp.begin(from_v, 0.0)
    taken, now_s = [], 0.0
    while not ramp.finished:
        now_s += 0.01
        if ramp.due(now_s):
            ramp.busy = True
            taken.append(ramp.next_v())
            ramp.step_done(now_s)
    return taken


def test_both_rails_arrive_together() -> None:
    ramp = Ramp(1, 10.0, -5.0, 0.1, 1.0)
    taken = steps_of(ramp, (0.0, 0.0))
    assert taken == [(2.5, -1.25), (5.0, -2.5), (7.5, -3.75), (10.0, -5.0)]
    assert ramp.share == 1.0


@pytest.mark.parametrize(("ramp_s", "steps"), [(0.0, 1), (0.1, 1), (0.25, 1), (0.26, 2), (2.0, 8), (-1.0, 1)])
def test_no_step_is_longer_than_it_may_be(ramp_s: float, steps: int) -> None:
    ramp = Ramp(1, 10.0, -10.0, 0.1, ramp_s)
    assert ramp.steps == steps
    assert ramp.step_s <= STEP_S


def test_a_step_waits_for_the_one_before_and_for_its_time() -> None:
    ramp = Ramp(1, 10.0, -10.0, 0.1, 1.0)
    assert not ramp.due(100.0), "it has not begun"
    ramp.begin((0.0, 0.0), 10.0)
    assert not ramp.due(10.2)
    assert ramp.due(10.25)
    ramp.busy = True
    assert not ramp.due(99.0)
    ramp.step_done(12.0)
    assert ramp.due(12.0), "what is late is not made up for by bigger steps"
    assert ramp.next_v() == (5.0, -5.0)


def test_a_ramp_begins_where_the_rails_are_and_may_go_down() -> None:
    taken = steps_of(Ramp(1, 5.0, -5.0, 0.1, 0.5), (15.0, -15.0))
    assert taken == [(10.0, -10.0), (5.0, -5.0)]


@given(st.floats(0, 60), st.floats(0, 60), st.floats(0, 60), st.floats(0, 60), st.floats(0, 5))
def test_it_never_leaves_the_way(a: float, b: float, c: float, d: float, ramp_s: float) -> None:
    taken = steps_of(Ramp(1, c, -d, 0.1, ramp_s), (a, -b))
    assert taken[-1] == (c, -d)
    for (p, n), (q, m) in zip([(a, -b), *taken], taken, strict=False):
        assert min(a, c) - 1e-9 <= q <= max(a, c) + 1e-9
        assert min(-b, -d) - 1e-9 <= m <= max(-b, -d) + 1e-9
        assert abs(q - p) <= abs(c - a) / len(taken) + 1e-9
        assert abs(m - n) <= abs(d - b) / len(taken) + 1e-9
