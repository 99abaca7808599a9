"""Limits as an interval."""

from __future__ import annotations

import math

import pytest

from benchkit.judge.limits import Limits


def test_interval() -> None:
    limits = Limits(1.0, 2.0, 1.5, "V", "the model")
    assert limits.width == 1.0
    assert [limits.hold(value) for value in (0.99, 1.0, 2.0, 2.01)] == [False, True, True, False]
    assert str(limits) == "1.000 V to 2.000 V"


def test_open_sides() -> None:
    assert Limits(None, 2.0, None, "V", "rule").width == math.inf
    assert Limits(None, 2.0, None, "V", "rule").hold(-1e9)
    assert str(Limits(None, 2.0, None, "V", "rule")) == "at most 2.000 V"
    assert str(Limits(2.0, None, None, "V", "rule")) == "at least 2.000 V"
    assert str(Limits(None, None, None, "V", "rule")) == "no limits"


@pytest.mark.parametrize(
    ("low", "high", "nominal"), [(2.0, 1.0, None), (math.nan, 1.0, None), (0.0, math.inf, None), (0.0, 1.0, math.nan)]
)
def test_refused(low: float, high: float, nominal: float | None) -> None:
    with pytest.raises(ValueError, match=r"no limit|upside down"):
        Limits(low, high, nominal, "V", "the model")
