"""When a look at the supply means off: each line from both sides."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import pytest

from benchkit.events import SupplyState
from benchkit.instruments.supply import Sample
from benchkit.keeper.protocol import WatchLines
from benchkit.keeper.watch import look

GOOD = SupplyState(output_on=True, positive_a=0.02, negative_a=0.02, limit_a=0.05)
LINES = WatchLines(positive_a=0.03, negative_a=0.03, grace_s=2.0)


def sample(outputs: tuple[bool, bool] = (True, True), **changes: Any) -> Sample:
    return Sample(state=replace(GOOD, **changes), outputs=outputs)


@pytest.mark.parametrize(
    ("changes", "what"),
    [
        ({}, None),
        ({"positive_a": 0.03}, None),
        ({"positive_a": 0.0301}, "rail+.current"),
        ({"negative_a": 0.0301}, "rail-.current"),
        ({"positive_in_limit": True}, "rail+"),
        ({"negative_in_limit": True}, "rail-"),
        ({"outputs": (False, True)}, "positive output"),
        ({"outputs": (True, False)}, "negative output"),
    ],
)
def test_each_line(changes: dict[str, Any], what: str | None) -> None:
    trip = look(sample(**changes), LINES, 2.0)
    assert (trip.what if trip else None) == what


@pytest.mark.parametrize(
    ("elapsed_s", "trips"), [(-1.0, False), (0.0, False), (1.999, False), (2.0, True), (1e9, True)]
)
def test_the_grace_ends_on_time(elapsed_s: float, trips: bool) -> None:
    held = sample(positive_in_limit=True, positive_a=0.05)
    assert (look(held, LINES, elapsed_s) is not None) == trips


def test_an_output_that_is_off_trips_in_the_grace_too() -> None:
    assert look(sample(outputs=(True, False)), LINES, 0.0) is not None


def test_what_is_not_watched_does_not_trip() -> None:
    held = sample(positive_in_limit=True, positive_a=9.0)
    assert look(held, WatchLines(trip_on_limit=False), 10.0) is None


def test_a_trip_holds_its_figures() -> None:
    trip = look(sample(negative_a=0.04), LINES, 5.0)
    assert trip is not None
    assert (trip.value, trip.limit) == (0.04, 0.03)
    assert "rail-.current is 0.04 A, above 0.03 A" in trip.reason
