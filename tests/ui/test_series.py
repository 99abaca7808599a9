"""Which walk comes after which."""

from __future__ import annotations

import pytest

from benchkit.errors import EntryError
from benchkit.ui.series import LEAVE, NEXT, end_question, first_turn, parse_channels, resumed_turn
from benchkit.ui.widgets.answer_keys import keyed


@pytest.mark.parametrize(
    ("text", "names"),
    [
        (None, ()),
        ("1", ("1",)),
        ("3", ("1", "2", "3")),
        ("L", ("L",)),
        ("L,R", ("L", "R")),
        (" left , right2 ", ("left", "right2")),
        (" 2 ", ("1", "2")),
        ("8", tuple(str(number) for number in range(1, 9))),
        ("Ho\u0308he", ("Höhe",)),
        ("a" * 12, ("a" * 12,)),
    ],
)
def test_channels_are_a_number_or_names(text: str | None, names: tuple[str, ...]) -> None:
    assert parse_channels(text) == names


@pytest.mark.parametrize(
    "text",
    [
        "",
        "  ",
        "0",
        "9",
        "-1",
        "+2",
        "2.5",
        "2,5",
        "1,2",
        "1e0",
        "0x2",
        "٣",
        "２",
        "²",
        "a²",
        "L٣",
        "9" * 400,
        "L,,R",
        ",",
        "L,",
        "L,l",
        "a" * 13,
        "L\x1b,R",
        "right rear",
        "../../x",
        "L/R",
        "-L",
        "2L",
        "L-2",
        "L.R",
        "\ud800",
        ",".join("abcdefghi"),
    ],
)
def test_other_channels_are_refused_with_what_is_wanted(text: str) -> None:
    with pytest.raises(EntryError, match="--channels got") as caught:
        parse_channels(text)
    assert "a whole number from 1 to 8, or names with commas between, such as L,R" in str(caught.value)
    assert "letters and digits, first a letter" in str(caught.value)
    str(caught.value).encode("utf-8")
    assert len(str(caught.value)) < 300


def test_channels_follow_each_other_and_then_comes_another_unit() -> None:
    turn = first_turn(("L", "R"), "")
    assert (turn.channel, turn.unit, turn.next_label, turn.another_unit) == ("L", "", "next channel: R", False)
    turn = turn.after("A-17")
    assert (turn.channel, turn.unit, turn.next_label, turn.another_unit) == ("R", "A-17", "next unit", False)
    turn = turn.after("A-17")
    assert (turn.channel, turn.unit, turn.next_label, turn.another_unit) == ("L", "", "next channel: R", True)
    assert (turn.number, turn.after("A-18").unit) == (2, "A-18")


def test_a_unit_with_one_channel_is_followed_by_the_next_unit() -> None:
    turn = first_turn((), "A-17")
    assert (turn.channel, turn.left, turn.next_label) == ("", (), "next unit")
    assert (turn.after("A-17").unit, turn.after("A-17").another_unit) == ("", True)


def test_a_walk_that_is_gone_on_with_is_followed_by_the_channels_behind_it() -> None:
    assert resumed_turn(("L", "R", "C"), "A-17", "R").left == ("C",)
    assert resumed_turn((), "A-17", "").next_label == "next unit"
    assert resumed_turn((), "A-17", "R").next_label == "", "nobody said which channels there are"
    with pytest.raises(EntryError, match='This record is of the channel "C"'):
        resumed_turn(("L", "R"), "A-17", "C")
    with pytest.raises(EntryError, match="a unit without channels"):
        resumed_turn(("L", "R"), "A-17", "")


@pytest.mark.parametrize(
    ("label", "usual", "keys"),
    [
        ("", LEAVE, {"q": LEAVE}),
        ("next unit", LEAVE, {"q": LEAVE, "n": NEXT}),
        ("next channel: Quiet one", NEXT, {"q": LEAVE, "n": NEXT}),
    ],
)
def test_n_goes_on_and_q_leaves(label: str, usual: str, keys: dict[str, str]) -> None:
    question = end_question(label)
    assert question.choices[0].value == usual
    assert question.do.startswith("Enter leaves benchkit" if usual == LEAVE else f"Enter goes on with the {label}")
    assert (not label) == (";" not in question.do)
    assert {letter: choice.value for letter, choice in keyed(question.choices)} == keys
