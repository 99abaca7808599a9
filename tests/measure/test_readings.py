"""Readings: a number or an overload, plain fields, there and back."""

from __future__ import annotations

import json
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit.errors import EntryError
from benchkit.measure.readings import FUNCTIONS, Reading
from benchkit.quantities import Overload


def _reading(**changes: Any) -> Reading:
    fields: dict[str, Any] = {
        "point": "spread",
        "value": 2.4,
        "unit": "V",
        "standard_uncertainty": 0.001,
        "meter": "entered by hand",
        "function": "dc volts",
    }
    return Reading(**(fields | changes))


@pytest.mark.parametrize(
    "changes",
    [
        {"value": None},
        {"overload": True},
        {"value": float("nan")},
        {"value": float("inf")},
        {"unit": "A"},
        {"function": "weight"},
        {"standard_uncertainty": -1.0},
        {"standard_uncertainty": float("nan")},
        {"own_uncertainty": -1.0},
        {"range": 0.0},
        {"samples": 0},
        {"negative": True},
    ],
)
def test_contradictions_are_refused(changes: dict[str, Any]) -> None:
    with pytest.raises(ValueError):  # noqa: PT011  (each has words of its own)
        _reading(**changes)


def test_measured() -> None:
    assert _reading().measured == 2.4
    over = _reading(value=None, overload=True, standard_uncertainty=None)
    assert over.measured == Overload(positive=True)
    assert _reading(value=None, overload=True, negative=True).measured == Overload(positive=False)
    assert str(over) == "spread overload"
    assert str(_reading()) == "spread 2.4000 V"


@given(
    st.one_of(st.none(), st.floats(-1e6, 1e6)),
    st.one_of(st.none(), st.floats(0, 1e3)),
    st.sampled_from(sorted(FUNCTIONS)),
    st.integers(1, 1000),
)
def test_there_and_back_through_json(value: float | None, u: float | None, function: str, samples: int) -> None:
    reading = _reading(
        value=value,
        overload=value is None,
        standard_uncertainty=u,
        function=function,
        unit=FUNCTIONS[function],
        samples=samples,
    )
    assert Reading.from_dict(json.loads(json.dumps(reading.as_dict(), allow_nan=False))) == reading


@pytest.mark.parametrize("fields", [{}, {"point": "spread"}, {"nonsense": 1}])
def test_unusable_fields_are_refused(fields: dict[str, Any]) -> None:
    with pytest.raises(EntryError, match="fields of a reading"):
        Reading.from_dict(fields)
