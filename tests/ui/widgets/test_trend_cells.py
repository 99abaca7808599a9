from __future__ import annotations

from hypothesis import given
from hypothesis import strategies as st

from benchkit.ui.look import SAFE
from benchkit.ui.widgets.trend_cells import trend_rows

TRENDS = st.lists(st.tuples(st.floats(0, 1e4), st.floats(-1e3, 1e3)), max_size=60).map(
    lambda found: tuple(sorted(found, key=lambda pair: pair[0]))
)


@given(st.integers(2, 120), st.integers(3, 20), TRENDS)
def test_size_and_characters(width: int, height: int, trend: tuple[tuple[float, float], ...]) -> None:
    rows = trend_rows(width, height, trend, -1.0, 1.0, target=0.0)
    assert len(rows) == height
    assert {len(row) for row in rows} == {width}
    assert all(character == " " or character in SAFE for row in rows for character in row)
    marks = sum(row.count(mark) for row in rows for mark in "█▲▼")
    assert marks <= width
    assert (marks > 0) == bool(trend)


def test_a_ramp_climbs_from_left_to_right() -> None:
    rows = trend_rows(9, 9, [(float(at), at / 8) for at in range(9)], 0.0, 1.0)
    places = [next(row for row in range(9) if rows[row][column] == "█") for column in range(9)]
    assert places == sorted(places, reverse=True)
    assert places[0] > places[-1]


def test_a_gap_stays_empty() -> None:
    rows = trend_rows(11, 5, [(0.0, 0.5), (10.0, 0.5)], 0.0, 1.0)
    middle = rows[2]
    assert middle == "█" + " " * 9 + "█"


def test_beyond_the_picture_is_marked_at_its_edge() -> None:
    rows = trend_rows(4, 5, [(0.0, 99.0), (3.0, -99.0)], 0.0, 1.0)
    assert rows[0][0] == "▲"
    assert rows[-1][-1] == "▼"


def test_a_window_leaves_older_readings_out() -> None:
    rows = trend_rows(5, 5, [(0.0, 99.0), (100.0, 0.5)], 0.0, 1.0, window_s=10.0)
    assert "▲" not in "".join(rows)


def test_a_single_reading_stands_at_the_right() -> None:
    rows = trend_rows(7, 5, [(3.0, 0.5)], 0.0, 1.0)
    assert rows[2] == "      █"


def test_no_room_draws_nothing() -> None:
    assert trend_rows(1, 5, [(0.0, 0.0)], 0.0, 1.0) == (" ",) * 5
