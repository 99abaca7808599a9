"""Amounts of turns and their words."""

from __future__ import annotations

import pytest

from benchkit.judge.screw import Scale
from benchkit.judge.turning import MOST_TURNS, SLACK, SLACK_S, Turning


def turning(track: float = 25.0) -> Turning:
    scale = Scale(target=0.02, knee=0.0, floor=1e-6)
    return Turning(
        scale, 0.018, 0.022, more_way="anticlockwise", track=track, settled_share=1.0, unit="V"
    )  # fmt: skip


@pytest.mark.parametrize(
    ("slope", "track", "words"),
    [
        (0.002, 25.0, "; 5 to 10 turns to go from here"),
        (0.0065, 25.0, ""),  # a little more than one move
        (0.0005, 25.0, "; more than 20 turns to go from here"),  # never more than the track
        (0.002, 1.0, ""),  # a screw that is turned by degrees
        (None, 25.0, ""),
    ],
)
def test_where_many_turns_are_needed_the_words_say_how_many(slope: float | None, track: float, words: str) -> None:
    way = turning(track)
    turns = way.wanted(0.002, 0.002, slope, by_model=False, by_rest=False)
    assert abs(turns) <= MOST_TURNS
    assert way.of_how_many(turns, 0.002, slope, by_rest=False) == words


def test_slack_is_spoken_of_once() -> None:
    way = turning()
    assert [way.slack(at) for at in (5.0, 5.0 + SLACK_S / 2.0, 5.0 + SLACK_S, 500.0)] == [SLACK, SLACK, "", ""]


@pytest.mark.parametrize(
    ("missing", "most"),
    [(0.5, 0.5), (1.0, 1.0), (1.5, 1.0), (2.5, 1.5), (3.0, 1.8), (10.0, MOST_TURNS)],
)
def test_what_is_more_than_a_turn_away_is_not_reached_in_one_step(missing: float, most: float) -> None:
    """A hand turns a quarter more than it is told, and a slope is half learned."""
    way = turning()
    slope = way.missing(0.01, 1.0, by_rest=False) / missing
    assert 0.5 * most < way.wanted(0.01, 0.01, slope, by_model=False, by_rest=False) <= most + 1e-9
