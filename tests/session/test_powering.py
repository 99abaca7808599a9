from __future__ import annotations

import hypothesis.strategies as st
import pytest
from hypothesis import given

from benchkit.errors import EntryError
from benchkit.procedure.actions import SetSupply
from benchkit.session.powering import typed_supply

TWO = SetSupply(item="i", positive_v=5.0, negative_v=-5.0, limit_a=0.045)
ONE = SetSupply(item="i", positive_v=24.0, negative_v=0.0, limit_a=0.1)


@pytest.mark.parametrize(
    "text",
    [
        "5.00 V 21 mA -5.00 V 20 mA",
        "5.00V 21mA -5.00V 20mA",
        "5.00 V 21 mA 5.00 V 20 mA",
        "5.00 V, 21 mA, -5.00 V, 20 mA",
        "5.00 V 21 mA and -5.00 V 20 mA",
        "5000 mV 0.021 A -5 V -20 mA",
    ],
)
def test_two_rails(text: str) -> None:
    state = typed_supply(text, TWO)
    assert (state.output_on, state.positive_v, state.negative_v) == (True, 5.0, -5.0)
    assert state.positive_a == pytest.approx(0.021)
    assert state.negative_a == pytest.approx(0.020)
    assert not state.in_limit


def test_what_nobody_read_back_is_not_claimed() -> None:
    state = typed_supply("5 V 21 mA -5 V 20 mA", TWO)
    assert (state.set_positive_v, state.set_negative_v, state.limit_a) == (None, None, None)


@pytest.mark.parametrize(
    "text", ["5 V 45 mA -5 V 45 mA limit", "5 V 45 mA -5 V 45 mA in limit", "Limit 5V 45mA 5V 45mA"]
)
def test_in_limit(text: str) -> None:
    state = typed_supply(text, TWO)
    assert state.positive_in_limit
    assert state.negative_in_limit


def test_one_rail() -> None:
    state = typed_supply("24.1 V 55 mA limit", ONE)
    assert (state.positive_v, state.negative_v, state.negative_a) == (24.1, 0.0, 0.0)
    assert state.positive_in_limit
    assert not state.negative_in_limit


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "0 voltages and 0 currents came"),
        ("5 V", "1 voltages and 0 currents"),
        ("5 V 21 mA", "2 of each"),
        ("5 V 21 mA -5 V 20 mA 3 V", "3 voltages"),
        ("5 21", "'5' has no unit"),
        ("five volts", "'five' has no unit"),
        ("5 kg", "has no unit"),
        ("x V 21 mA -5 V 20 mA", "x V"),
        ("nan V 21 mA -5 V 20 mA", "nan"),
        ("5,0 V 21 mA -5 V 20 mA", "has no unit"),
    ],
)
def test_an_entry_that_is_none(text: str, words: str) -> None:
    with pytest.raises(EntryError) as caught:
        typed_supply(text, TWO)
    assert words in str(caught.value)
    assert caught.value.exit_status == 2


@given(st.text(max_size=30))
def test_any_text_is_a_state_or_an_entry_error(text: str) -> None:
    try:
        state = typed_supply(text, TWO)
    except EntryError:
        return
    assert state.positive_v is not None
    assert state.negative_a is not None


@given(st.floats(-99, 99), st.floats(0, 5), st.floats(0, 99), st.floats(0, 5))
def test_numbers_come_through(v1: float, a1: float, v2: float, a2: float) -> None:
    state = typed_supply(f"{v1:.6f} V {a1:.6f} A {-v2:.6f} V {a2:.6f} A", TWO)
    assert state.positive_v == pytest.approx(v1, abs=1e-6)
    assert state.negative_v == pytest.approx(-v2, abs=1e-6)
    assert state.positive_a == pytest.approx(a1, abs=1e-6)
    assert state.negative_a == pytest.approx(a2, abs=1e-6)
