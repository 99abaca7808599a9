from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit.ui import look


def test_contrast_of_known_pairs() -> None:
    # WCAG 2.1: black on white is 21:1 by definition; #767676 is the well-known last grey above 4.5:1 on white.
    assert look.contrast("#000000", "#ffffff") == pytest.approx(21.0)
    assert look.contrast("#ffffff", "#ffffff") == pytest.approx(1.0)
    assert 4.5 < look.contrast("#767676", "#ffffff") < 4.6
    assert look.contrast("#777777", "#ffffff") < 4.5


@pytest.mark.parametrize("ground", [look.GROUND, look.PANEL])
@pytest.mark.parametrize("ink", look.TEXT_COLOURS)
def test_every_text_colour_is_readable(ink: str, ground: str) -> None:
    assert look.contrast(ink, ground) >= 4.5


@pytest.mark.parametrize("name", ["on", "unknown"])
def test_black_on_the_supply_line_is_readable(name: str) -> None:
    assert look.contrast("#000000", look.SUPPLY_COLOURS[name]) >= 4.5  # type: ignore[index]


def test_verdicts_differ_in_word_shape_and_place() -> None:
    assert len(set(look.VERDICT_WORDS.values())) == 3
    assert len(set(look.VERDICT_SHAPES.values())) == 3
    assert sorted(look.VERDICT_ORDER) == sorted(look.VERDICT_WORDS)


def test_pass_and_fail_differ_without_red_and_green() -> None:
    """Blue is what the commonest colour-blind eyes keep: the blue channels lie far apart."""
    assert int(look.PASS[5:], 16) - int(look.FAIL[5:], 16) > 100


@pytest.mark.parametrize(
    ("text", "written"),
    [
        ("220 Ω", "220 ohm"),
        ("5 μV", "5 µV"),
        ("±15 V … 20 °C", "±15 V ... 20 °C"),
        ("Müller", "Müller"),
        ("5 €", "5 EUR"),
        ("ok ✓", "ok ?"),
        ("10\u00a0mV", "10 mV"),
    ],
)
def test_text_that_console_fonts_lack_is_written_out(text: str, written: str) -> None:
    assert look.safe(text) == written


@given(st.text())
def test_safe_text_holds_only_letters_and_drawable_characters(text: str) -> None:
    for character in look.safe(text):
        assert character.isascii() or character in look.SAFE or character.isalpha()
    assert look.safe(look.safe(text)) == look.safe(text)
