from __future__ import annotations

import itertools

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit.ui.widgets.digit_shapes import ROWS, SCALES, big_rows, drawable, fit, split_reading, width_of

FIGURES = st.text("0123456789+-. OL", min_size=1, max_size=9)


@given(FIGURES, st.sampled_from(SCALES))
def test_rows_have_the_width_that_is_promised(text: str, scale: tuple[int, int]) -> None:
    rows = big_rows(text, *scale)
    assert len(rows) == ROWS * scale[1]
    assert {len(row) for row in rows} == {width_of(text, scale[0])}
    assert set("".join(rows)) <= {"█", " "}


def test_no_two_figures_look_alike() -> None:
    for first, second in itertools.combinations("123456789-+.L0", 2):
        assert big_rows(first) != big_rows(second)


@given(FIGURES, st.integers(1, 200), st.integers(1, 20))
def test_what_fits_fits_and_the_next_larger_would_not(text: str, width: int, height: int) -> None:
    scale = fit(text, width, height)
    larger = SCALES if scale is None else SCALES[: SCALES.index(scale)]
    if scale is not None:
        assert width_of(text, scale[0]) <= width
        assert ROWS * scale[1] <= height
    for across, down in larger:
        assert width_of(text, across) > width or ROWS * down > height


def test_a_reading_fits_where_the_layouts_put_it() -> None:
    assert fit("-100.05", 52, 5) == (2, 1)
    assert fit("-11.21", 36, 5) is not None


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
