"""The plot in plain characters."""

from __future__ import annotations

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from benchkit.ui.bias_plot import HEIGHT, LABEL, WIDTH, Curve, plot

X = np.linspace(-2.0, 2.0, 41)


def field(lines: list[str]) -> list[str]:
    return [line[LABEL + 2 :].ljust(WIDTH) for line in lines[:HEIGHT]]


def test_a_hump_is_drawn_as_a_hump() -> None:
    rows = field(plot([Curve("o", X, 1.0 - X**2)], 1.0))
    assert rows[0][WIDTH // 2] == "o"
    assert rows[-1][0] == rows[-1][-1] == "o"
    assert rows[0][0] == rows[-1][WIDTH // 2] == " "


def test_figures_stand_at_their_rows() -> None:
    lines = plot([Curve("o", X, 0.95 + 0.01 * X)], 2.0)
    assert lines[0].split(" |")[0].strip() == "0.9700"
    assert lines[HEIGHT - 1].split(" |")[0].strip() == "0.9300"
    assert lines[-1].split() == ["-2", "A", "0", "+2", "A"]


def test_the_later_curve_is_seen_where_two_meet() -> None:
    rows = field(plot([Curve(".", X, X * 0.0), Curve("o", X, X * 0.0)], 1.0))
    assert "." not in "".join(rows)
    assert "".join(rows).count("o") == WIDTH


def test_a_steep_curve_stays_one_line() -> None:
    rows = field(plot([Curve("o", X, np.where(X > 0.05, 1.0, 0.0))], 2.0))
    assert all("o" in row for row in rows)


@settings(max_examples=40, deadline=None)
@given(
    st.lists(st.lists(st.floats(-1e3, 1e3), min_size=41, max_size=41), min_size=1, max_size=3),
    st.floats(1e-3, 2.0),
)
def test_any_curve_fits_and_is_ascii(values: list[list[float]], reach: float) -> None:
    lines = plot([Curve("+", X, np.array(y)) for y in values], reach)
    assert len(lines) == HEIGHT + 2
    assert all(len(line) <= LABEL + 2 + WIDTH and line.isascii() for line in lines)
