from __future__ import annotations

import itertools
import math
from collections.abc import Sequence

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit.ui.look import SAFE
from benchkit.ui.widgets.trend_cells import WINDOWS_S, Row, Trace, trend_picture, window_s

Points = tuple[tuple[float, float], ...]
TRENDS = st.lists(st.tuples(st.floats(0, 1e4), st.floats(-1e3, 1e3)), max_size=60).map(
    lambda found: tuple(sorted(found, key=lambda pair: pair[0]))
)


def trace(read: Points = (), expected: Points = (), **more: float) -> Trace:
    return Trace(
        read=read,
        low=-1.0,
        high=1.0,
        target=0.0,
        expected=expected,
        low_text="-1.00",
        high_text="1.00",
        target_text="0.00",
        rest_low=more.get("rest_low"),
        rest_high=more.get("rest_high"),
    )


def places(rows: Sequence[Row], kind: str) -> list[tuple[int, int]]:
    return [(y, x) for y, row in enumerate(rows) for x, cell in enumerate(row) if cell.kind == kind]


def words(row: Row) -> str:
    return "".join(cell.character for cell in row)


@given(st.integers(2, 120), st.integers(2, 20), TRENDS, TRENDS)
def test_size_and_characters(width: int, height: int, read: Points, expected: Points) -> None:
    rows = trend_picture(width, height, trace(read, expected, rest_low=-0.2, rest_high=0.1))
    assert len(rows) == height
    assert {len(row) for row in rows} == {width}
    assert all(c == " " or c.isascii() or c in SAFE for row in rows for c in words(row))
    if width >= 24 and height >= 3:
        assert bool(places(rows, "read")) == bool(read)


def test_a_rise_climbs_to_now() -> None:
    rows = trend_picture(60, 12, trace(tuple((float(at), at / 60.0) for at in range(61))))
    found = places(rows, "read")
    columns = sorted({x for _, x in found})
    assert columns == list(range(columns[0], columns[-1] + 1))
    heights = [min(y for y, x in found if x == column) for column in columns]
    assert heights == sorted(heights, reverse=True)
    assert heights[0] > heights[-1]
    assert {x for y, x in places(rows, "limit") if words(rows[y])[x] == "┼"} == {columns[-1]}


def test_now_stands_still_whatever_is_expected() -> None:
    read = tuple((float(at), 0.5) for at in range(61))
    (now,) = {x for _, x in places(trend_picture(70, 8, trace(read)), "now")}
    more = trend_picture(70, 8, trace(read, ((60.0, 0.5), (80.0, 0.6)), rest_low=0.5, rest_high=0.7))
    assert {x for _, x in places(more, "now")} == {now}
    assert min(x for _, x in places(more, "expected")) > now
    assert {x for _, x in places(more, "rest")} == {69}


def test_what_is_over_only_moves_to_the_left() -> None:
    read = tuple((at * 0.25, 0.9 * math.sin(at / 12.0)) for at in range(600))
    pictures = [trend_picture(66, 9, trace(read[first : first + 200])) for first in range(0, 40)]
    moved = 0
    for one, other in itertools.pairwise(pictures):
        before, after = ([{y for y, x in places(p, "read") if x == c} for c in range(66)] for p in (one, other))
        whole = slice(14, 40)  # slices that hold all of their readings in both
        if before[whole] != after[whole]:
            moved += 1
            assert before[15:40] == after[14:39]
    assert 0 < moved < 39


def test_a_gap_stays_empty_and_slow_readings_are_joined() -> None:
    quick = tuple((at * 0.5, 0.5) for at in range(21)) + tuple((20.0 + at * 0.5, 0.5) for at in range(21))
    columns = {x for _, x in places(trend_picture(66, 6, trace(quick)), "read")}
    assert columns != set(range(min(columns), max(columns) + 1))
    slow = tuple((at * 5.0, 0.5) for at in range(7))
    columns = {x for _, x in places(trend_picture(66, 6, trace(slow)), "read")}
    assert columns == set(range(min(columns), max(columns) + 1))


def test_beyond_the_picture_is_marked_at_its_edge() -> None:
    rows = trend_picture(40, 5, trace(tuple((float(at), 99.0 if at < 10 else -99.0) for at in range(20))))
    assert "▲" in words(rows[0])
    assert "▼" in words(rows[3])


@pytest.mark.parametrize("height", [4, 6, 12, 20])
def test_limits_have_their_figures_and_stay_apart(height: int) -> None:
    rows = trend_picture(60, height, trace(((0.0, -50.0), (5.0, 0.0))))
    low, high = (
        next(y for y, row in enumerate(rows) if words(row).startswith(text)) for text in ("-1.00 ─", " 1.00 ─")
    )
    assert low - high >= (2 if height > 4 else 1)


@pytest.mark.parametrize(
    ("lasted", "ahead", "window"),
    [(0.0, 0.0, 30.0), (29.0, 10.0, 30.0), (31.0, 0.0, 60.0), (70.0, 55.0, 120.0), (70.0, 600.0, 120.0)],
)
def test_the_window_holds_what_was_read_and_widens_only_so_far(lasted: float, ahead: float, window: float) -> None:
    expected = ((lasted, 0.0), (lasted + ahead, 0.0)) if ahead else ()
    assert window_s(trace(((0.0, 0.0), (lasted, 0.0)), expected)) == window
    assert window in WINDOWS_S


def test_times_in_words() -> None:
    read = tuple((float(at), 0.5) for at in range(100))
    times = words(trend_picture(80, 6, trace(read))[-1]).split()
    assert times == ["-2", "min", "-1", "min", "now", "+30", "s", "+1", "min"]


def test_no_room_draws_nothing() -> None:
    assert trend_picture(23, 8, trace(((0.0, 0.0),)))[0][0].character == " "
    assert trend_picture(2, 2, trace()) == ((trend_picture(2, 2, trace())[0]),) * 2
