from __future__ import annotations

from dataclasses import replace

import pytest

from benchkit.ui.before import before_the_walk, left_before_the_walk
from tests.ui.scripted import OPENING

REAL = replace(OPENING, kind="walk", supply="TCPIP::bench")


@pytest.mark.parametrize(
    ("opening", "label", "words"),
    [
        (OPENING, "SUPPLY NOT ASKED YET", "simulated supply"),
        (REAL, "SUPPLY NOT ASKED YET", "it may be on"),
        (replace(REAL, resumed=True), "SUPPLY NOT ASKED YET", "it may be on"),
        (replace(REAL, supply="by hand"), "SUPPLY IN YOUR HANDS", "may be on"),
    ],
)
def test_before_the_walk_nothing_is_claimed(opening, label, words) -> None:  # type: ignore[no-untyped-def]
    found, pressed = before_the_walk(opening), before_the_walk(opening, pressed=True)
    assert (found.energised, found.label, found.hint) == ("unknown", label, "off BY HAND")
    assert words in found.words
    assert "OFF" not in found.words
    assert pressed.words.startswith("F9 SWITCHED NOTHING")


def test_leaving_before_it_says_so() -> None:
    assert "may be on" in left_before_the_walk(REAL)
    assert "may be on" in left_before_the_walk(replace(REAL, supply="by hand"))
    assert left_before_the_walk(OPENING) == "The rehearsal was not begun."
