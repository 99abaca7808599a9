"""Names are told apart from readings."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit.errors import InstrumentError
from benchkit.instruments.names import is_name, name_in


@pytest.mark.parametrize("line", ["Own,Meter,M-1,1.0\r", " METER ", "Maker,3000E,0,1", "ÖLM 7"])
def test_names(line: str) -> None:
    assert name_in(line, "The meter") == line.strip()


@pytest.mark.parametrize("line", ["", "\r", "+1.0E-03", "1,0", "37", "+9.9E+37;0", "A\x1b[2J", "-1e5,-2e5"])
def test_others(line: str) -> None:
    with pytest.raises(InstrumentError, match="The meter gave its name as") as caught:
        name_in(line, "The meter")
    assert caught.value.kind == "garbled"
    assert caught.value.message.isprintable()


@given(value=st.floats(allow_nan=False, allow_infinity=False))
def test_a_reading_is_none(value: float) -> None:
    assert not is_name(f"{value:+.6E}")
    assert not is_name(repr(value))
