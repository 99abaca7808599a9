from __future__ import annotations

import itertools
from dataclasses import replace

import pytest

from benchkit.session.front import LiveView
from benchkit.ui.live_text import LiveLines, live_line
from benchkit.ui.widgets.trim_words import MOOD_LOOKS, plain_reading
from tests.ui.live_views import LIVES, PROBING, SOAK_VIEW


class Clock:
    def __init__(self) -> None:
        self.now = 100.0

    def __call__(self) -> float:
        return self.now


@pytest.mark.parametrize("name", LIVES)
def test_a_line_says_all_that_the_screen_says(name: str) -> None:
    live = LIVES[name]
    line = live_line(live)
    assert line.startswith(f"{live.point} {plain_reading(live)}, ")
    for words in (live.advice, live.rate_text, live.settles_text, live.capture):
        assert words in line
    assert ("TOO LOW" if name == "turn" else MOOD_LOOKS[live.mood].word) in line


def test_a_soak_says_what_is_left() -> None:
    assert SOAK_VIEW.live is not None
    line = live_line(SOAK_VIEW.live, SOAK_VIEW.busy, SOAK_VIEW.remaining_s)
    assert line.endswith("The stage soaks; about 100 s left")


def test_while_probes_are_placed_there_is_nothing_to_turn() -> None:
    assert PROBING.live is not None
    line = live_line(replace(PROBING.live, mood="turn"), placing=True)
    assert line == "emitter.upper.1 19.50 mV; at rest 1.2 s of 2.0 s"
    assert "READING GONE" in live_line(LIVES["gone"], placing=True)


def test_at_most_one_line_a_second_and_none_without_news() -> None:
    clock = Clock()
    lines = LiveLines(clock)
    live = LIVES["turn"]
    assert live.value is not None
    said: list[float] = []
    for number in range(300):  # a reading each 0.1 s that creeps, half of it too slowly to be worth a line
        creep = number * 2e-5 if number < 150 else 150 * 2e-5
        moved = replace(live, value=live.value + creep)
        if lines.line(moved):
            said.append(clock.now)
        clock.now += 0.1
    apart = [later - earlier for earlier, later in itertools.pairwise(said)]
    assert min(apart) >= 0.999
    assert 10 < len(said) < 20
    assert sum(at > 116.0 for at in said) <= 2, "still: a line each ten seconds"


def test_what_changes_is_said_as_soon_as_a_second_is_over() -> None:
    clock = Clock()
    lines = LiveLines(clock)
    assert lines.line(LIVES["inside"])
    clock.now += 0.5
    assert not lines.line(LIVES["gone"])
    clock.now += 0.5
    assert "READING GONE" in lines.line(LIVES["gone"])


def test_each_value_is_taken_once_and_a_new_channel_counts_anew() -> None:
    lines = LiveLines(Clock())

    def taken(captured: int) -> bool:
        live: LiveView = replace(LIVES["steady"], captured=captured)
        return lines.taken(live)

    assert [taken(captured) for captured in (0, 1, 1, 2, 0, 1)] == [False, True, False, True, False, True]
