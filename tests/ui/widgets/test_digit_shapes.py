from __future__ import annotations

import itertools

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit.ui.widgets.digit_shapes import SIZES, FigureSize, big_rows, drawable, fit, split_reading, width_of

FIGURES = st.text("0123456789+-. OL", min_size=1, max_size=9)


@given(FIGURES, st.sampled_from(SIZES))
def test_rows_have_the_width_that_is_promised(text: str, size: FigureSize) -> None:
    rows = big_rows(text, size)
    assert len(rows) == size.rows
    assert {len(row) for row in rows} == {width_of(text, size.across)}
    assert set("".join(rows)) <= {"█", " "}


def test_no_two_figures_look_alike() -> None:
    for first, second in itertools.combinations("123456789-+.L0", 2):
        assert big_rows(first) != big_rows(second)


@given(FIGURES, st.integers(1, 200), st.integers(1, 20))
def test_what_fits_fits_and_the_next_larger_would_not(text: str, width: int, height: int) -> None:
    size = fit(text, width, height)
    larger = SIZES if size is None else SIZES[: SIZES.index(size)]
    if size is not None:
        assert width_of(text, size.across) <= width
        assert size.rows <= height
    for other in larger:
        assert width_of(text, other.across) > width or other.rows > height


@pytest.mark.parametrize(
    ("text", "width", "height", "rows"),
    [("19.31", 54, 7, 7), ("19.31", 88, 12, 12), ("-100.05", 54, 7, 5), ("-11.21", 36, 5, 5), ("19.31", 36, 5, 5)],
)
def test_a_reading_fits_where_the_layouts_put_it(text: str, width: int, height: int, rows: int) -> None:
    size = fit(text, width, height)
    assert size is not None
    assert size.rows == rows


@pytest.mark.parametrize(
    ("text", "parts"),
    [
        ("20.31 mV", ("20.31", "mV")),
        ("overload", ("OL", "overload")),
        ("-3", ("-3", "")),
        ("no number", ("no", "number")),
    ],
)
def test_figures_and_unit(text: str, parts: tuple[str, str]) -> None:
    assert split_reading(text) == parts


def test_words_have_no_shape() -> None:
    assert not drawable("no")
    assert not drawable("")
    assert fit("no", 100, 10) is None
