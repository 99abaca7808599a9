from __future__ import annotations

from hypothesis import assume, example, given
from hypothesis import strategies as st

from benchkit.ui.look import SAFE
from benchkit.ui.widgets.gauge_scale import gauge_rows, scale_for

NUMBERS = st.floats(-1e6, 1e6, allow_nan=False)
WIDTHS = st.integers(20, 200)


@example(width=20, value=0.0, low=0.0, high=1.1125369292536007e-308, u=1.0)
@given(WIDTHS, NUMBERS, NUMBERS, NUMBERS, st.floats(0, 1e5))
def test_rows_are_as_wide_as_asked_and_drawable(width: int, value: float, low: float, high: float, u: float) -> None:
    assume(low < high)
    rows = gauge_rows(width, value, low, high, uncertainty=u, low_text="-1.234 mV", high_text="+9.9 mV")
    assert rows is not None
    for row in (rows.needle, rows.band, rows.figures):
        assert len(row) == width
        assert all(character.isascii() or character in SAFE for character in row)
    assert sum(rows.needle.count(mark) for mark in "▼<>") == 1
    assert rows.band.count("├") == rows.band.count("┤") == 1


@given(WIDTHS, st.floats(-1e3, 1e3), st.floats(1e-3, 1e3), st.floats(0, 1))
def test_the_needle_stands_on_the_right_side_of_each_limit(width: int, low: float, span: float, share: float) -> None:
    high = low + span
    assume(high > low)
    inside = gauge_rows(width, low + share * (high - low), low, high)
    assert inside is not None
    at = inside.needle.index("▼")
    assert inside.band.index("├") <= at <= inside.band.index("┤")
    above = gauge_rows(width, high + span * 0.3, low, high)
    assert above is not None
    assert above.needle.index("▼") > above.band.index("┤")
    below = gauge_rows(width, low - span * 0.3, low, high)
    assert below is not None
    assert below.needle.index("▼") < below.band.index("├")


def test_beyond_the_scale_is_said_at_its_ends() -> None:
    far, near = gauge_rows(40, 1e9, 1.0, 2.0), gauge_rows(40, -1e9, 1.0, 2.0)
    assert far is not None
    assert near is not None
    assert far.needle.rstrip().endswith(">")
    assert near.needle.startswith("<")
    assert len(far.needle.rstrip()) == 40


def test_uncertainty_is_drawn_two_standard_ones_to_each_side() -> None:
    rows = gauge_rows(101, 0.0, -3.0, 3.0, uncertainty=0.5)
    assert rows is not None
    # The scale runs from -5 to +5 over 100 steps: one unit is ten cells.
    assert rows.needle.index("├") == 40
    assert rows.needle.index("▼") == 50
    assert rows.needle.index("┤") == 60


def test_limits_stand_at_one_fifth_and_four_fifths() -> None:
    rows = gauge_rows(101, None, 10.0, 20.0, low_text="10 V", high_text="20 V", target=15.0)
    assert rows is not None
    assert (rows.band.index("├"), rows.band.index("┼"), rows.band.index("┤")) == (20, 50, 80)
    assert rows.needle.strip() == ""
    assert rows.figures.split() == ["10", "V", "20", "V"]


def test_one_limit_leaves_the_other_side_open() -> None:
    most = gauge_rows(41, 0.03, None, 0.1, high_text="10 %")
    assert most is not None
    assert most.band.startswith("═")
    assert most.band.endswith("░")
    least = gauge_rows(41, 12.0, 10.0, None, low_text="10 V")
    assert least is not None
    assert least.band.startswith("░")
    assert least.band.endswith("═")
    assert least.needle.index("▼") > least.band.index("├")


def test_without_limits_there_is_nothing_to_draw() -> None:
    assert gauge_rows(40, 1.0, None, None) is None
    assert scale_for(2, 0.0, 1.0) is None


@given(WIDTHS, NUMBERS)
def test_equal_limits_still_give_a_scale(width: int, limit: float) -> None:
    rows = gauge_rows(width, limit, limit, limit)
    assert rows is not None
    assert len(rows.band) == width


def test_this_units_limits_are_shaded_inside_the_designs_and_both_are_named() -> None:
    rows = gauge_rows(
        61, 0.0, -3.0, 3.0, low_text="-3 V", high_text="3 V", unit_low=-0.5, unit_high=1.0, unit_text="-0.5 V to 1 V"
    )
    assert rows is not None
    assert rows.band.index("├") < rows.band.index("█") < rows.needle.index("▼") < rows.band.rindex("█")
    assert rows.band.rindex("█") < rows.band.index("┤")
    assert rows.figures.startswith("design")
    assert rows.unit.split() == ["this", "unit", "-0.5", "V", "to", "1", "V"]
    assert len(rows.unit) == 61


@given(WIDTHS, st.floats(-1e3, 1e3), st.floats(1e-3, 1e3), st.floats(0, 1), st.floats(0, 1))
def test_narrowed_limits_of_any_width_are_drawn(width: int, low: float, span: float, first: float, last: float) -> None:
    assume(first <= last)
    high = low + span
    assume(high > low)
    rows = gauge_rows(
        width, low, low, high, unit_low=low + first * span, unit_high=low + last * span, unit_text="x" * 300
    )
    assert rows is not None
    assert "█" in rows.band
    assert all(len(row) == width for row in (rows.band, rows.figures, rows.unit))


def test_without_limits_of_its_own_a_unit_has_no_row() -> None:
    rows = gauge_rows(40, 0.0, -3.0, 3.0, low_text="-3 V", high_text="3 V")
    assert rows is not None
    assert rows.unit == ""
    assert "design" not in rows.figures
    assert "█" not in rows.band


def test_open_sides_reach_to_the_designs() -> None:
    rows = gauge_rows(40, 0.0, None, 3.0, high_text="3 V", unit_high=1.0, unit_text="at most 1 V")
    assert rows is not None
    assert rows.band[0] == "█"
    assert rows.band.rindex("█") < rows.band.index("┤")
