from __future__ import annotations

import pytest

from benchkit.judge.falls import Falls, fall_words
from benchkit.judge.screw import KNEE_V, Scale
from benchkit.judge.trust import RailLine
from tests.judge.test_trimming import LINE, TARGET_V, Bench, adviser, rail_at

FALLS = Falls(Scale(target=0.022, knee=KNEE_V, floor=2e-6))


@pytest.mark.parametrize(
    ("before", "value", "turned", "away"),
    [
        (0.022, 0.0001, 0.0, True),
        (0.022, 0.0001, 0.25, True),
        (0.022, 0.0100, 0.0, False),  # less than two thirds of it
        (0.022, 0.0050, -1.0, False),  # a turn back does as much
        (0.022, 0.0001, -0.25, True),  # a quarter turn does not
        (1e-5, 0.0, 0.0, False),  # not to be seen
    ],
)
def test_a_fall_is_told_from_a_move(before: float, value: float, turned: float, away: bool) -> None:
    assert FALLS.away(before, value, turned, 0.038, 2e-6) is away


@pytest.mark.parametrize(
    ("before_a", "now_a", "mood", "words"),
    [
        (0.10, 0.03, "no response", "the wiper has opened"),
        (0.10, 0.10, "gone", "the probe has slipped"),
        (0.10, None, "no response", "is the probe on the point?"),
        (None, 0.10, "no response", "is the probe on the point?"),
    ],
)
def test_the_current_tells_what_a_fall_is(before_a: float | None, now_a: float | None, mood: str, words: str) -> None:
    said = fall_words(before_a, now_a)
    assert said[0] == mood
    assert words in said[1]


def test_so_little_bias_tells_nothing_in_the_current() -> None:
    assert FALLS.with_current(0.022, 0.1, 0.05)
    assert not FALLS.with_current(0.022, 0.1, 0.095)
    assert not FALLS.with_current(0.0005, 0.1, 0.05)


def test_where_the_last_trusted_readings_had_got_to() -> None:
    falls = Falls(Scale(target=0.022, knee=KNEE_V, floor=2e-6))
    assert falls.peak is None
    for n, value in enumerate([0.009, 0.004, 0.005, 0.006, 0.0055]):
        falls.trusted(0.2 * n, value)
    assert falls.peak == (pytest.approx(0.6), 0.006), "what is older counts no more"
    falls.trusted(0.9, 0.6)
    assert falls.peak is None, "so much was no bias on its way up"


@pytest.mark.parametrize("reached", [0.3, 0.8])
@pytest.mark.parametrize(
    ("line", "rail_after", "mood", "words"),
    [
        (LINE, rail_at(0.0), "no response", "the supply's current with it: the wiper has opened"),
        (None, None, "no response", "is the probe on the point? Then the wiper has opened"),
        (LINE, 0.6 * rail_at(0.0), "no response", "is the probe on the point? Then the wiper has opened"),
        (LINE, None, "gone", "the supply's current did not"),  # it goes on as before
    ],
)
def test_a_wiper_that_opens_while_the_bias_is_on_its_way_up(
    reached: float, line: RailLine | None, rail_after: float | None, mood: str, words: str
) -> None:
    """The reading was never calm where it fell from, and the screw is still being turned for more."""
    bench = Bench(value=5e-5, rail_a=None if line is None else rail_at(5e-5), adviser=adviser(line=line))
    bench.look(2.0)
    while bench.value < reached * TARGET_V:
        bench.turn(0.1, seconds=0.1)
        bench.rail_a = None if line is None else rail_at(bench.value)
    before_v, bench.value, bench.broken = bench.value, 3e-5 if rail_after != 0.6 * rail_at(0.0) else 8e-5, True
    bench.rail_a = bench.rail_a if rail_after is None else rail_after
    since = len(bench.seen)
    advice = bench.look(6.0)
    assert advice.mood == mood, advice
    assert words in advice.words
    assert not any((one.turns or 0.0) > 0.0 for one in bench.seen[since:])
    bench.value, bench.broken = before_v, False
    bench.rail_a = None if line is None else rail_at(before_v)
    assert bench.look(4.0).mood == "turn", "it is trimmed on once it is back"


@pytest.mark.parametrize(
    ("began", "before", "value", "turned", "there"),
    [
        (0.0010, 0.0021, 0.00097, 0.5, True),  # half of it is gone, and it is where it began
        (0.0010, 0.0021, 0.00110, 0.0, True),  # warmer meanwhile
        (0.0010, 0.0021, 0.0015, 0.5, False),  # not all the way back
        (0.0010, 0.0021, 0.00001, 0.5, False),  # to nothing: a probe in the air
        (0.0010, 0.0012, 0.00097, 0.5, False),  # it had hardly come from there
        (0.0010, 0.0021, 0.00097, -0.5, False),  # turned back
        (0.0080, 0.0160, 0.0080, 0.5, False),  # a trim that began with bias
    ],
)
def test_a_fall_to_where_the_trim_began(
    began: float, before: float, value: float, turned: float, *, there: bool
) -> None:
    falls = Falls(Scale(target=0.022, knee=KNEE_V, floor=2e-6))
    assert not falls.to_the_start(before, value, turned, 2e-6), "nobody knows yet where it began"
    falls.trusted(0.0, began)
    falls.trusted(0.1, before)
    assert falls.to_the_start(before, value, turned, 2e-6) is there


def test_a_wiper_that_opens_next_to_least_bias_leaves_half_of_what_there_was() -> None:
    bench = Bench(value=0.001, rail_a=None, adviser=adviser(line=None))
    bench.look(0.3)
    while bench.value < 0.0021:
        bench.turn(0.02, seconds=0.1)
    bench.value, bench.broken = 0.00097, True
    since = len(bench.seen)
    advice = bench.look(6.0)
    assert advice.mood == "no response", advice
    assert "least bias" in advice.words
    assert not any((one.turns or 0.0) > 0.0 for one in bench.seen[since:])
