from __future__ import annotations

import math
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit.errors import EntryError
from benchkit.stage.conditions import Condition, Unpowered, parse_trimmer


@pytest.mark.parametrize(
    ("given_", "words"),
    [
        ({"positive_v": -1.0}, "positive"),
        ({"positive_v": math.nan}, "positive"),
        ({"negative_v": 1.0}, "negative"),
        ({"limit_a": 0.0}, "limit"),
        ({"limit_a": math.inf}, "limit"),
        ({"trimmer": "half"}, "trimmer"),
        ({"trimmer": 1.01}, "trimmer"),
        ({"trimmer": True}, "trimmer"),
        ({"target_share": 0.0}, "target share"),
        ({"when": "hot"}, "when"),
        ({"ambient_c": 500.0}, "ambient"),
        ({"fuse_ohm": -1.0}, "fuse"),
    ],
)
def test_what_is_no_condition(given_: dict[str, Any], words: str) -> None:
    with pytest.raises(EntryError, match=words):
        Condition(**({"positive_v": 15.0, "negative_v": -15.0} | given_))


def test_unpowered_wants_an_unpowered_point() -> None:
    assert Unpowered(point="ohm.rails").trimmer == "unknown"
    with pytest.raises(EntryError, match="unpowered"):
        Unpowered(point="spread")


@pytest.mark.parametrize(
    ("text", "position"),
    [("least", "least"), (" Most ", "most"), ("target", "target"), ("0.25", 0.25), ("25 %", 0.25), ("1", 1.0)],
)
def test_parse_trimmer(text: str, position: object) -> None:
    assert parse_trimmer(text) == position


@pytest.mark.parametrize("text", ["", "half", "1.2", "-0.1", "nan", "inf", "120 %"])
def test_parse_trimmer_refuses(text: str) -> None:
    with pytest.raises(EntryError, match="trimmer position"):
        parse_trimmer(text)


@given(st.text(max_size=12))
def test_parse_trimmer_never_breaks(text: str) -> None:
    try:
        position = parse_trimmer(text)
    except EntryError:
        return
    Condition(positive_v=1.0, negative_v=-1.0, trimmer=position)
