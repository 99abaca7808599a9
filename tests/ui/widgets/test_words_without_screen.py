from __future__ import annotations

from dataclasses import replace
from typing import get_args

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit.judge.advice import Mood
from benchkit.procedure.actions import Choice, Question
from benchkit.session.front import Reply
from benchkit.ui.look import SAFE
from benchkit.ui.widgets.answer_keys import keyed, typed_reply
from benchkit.ui.widgets.card import progress_words, time_words
from benchkit.ui.widgets.off_line import how_to_switch_off
from benchkit.ui.widgets.outcome import limits_words, marks_of, pointed, result_line, verdict_strip
from benchkit.ui.widgets.summary_words import NOTHING_BROKEN, broken_words, closing_sentence, still_open
from benchkit.ui.widgets.suspects_text import suspects_drawn
from benchkit.ui.widgets.trail_words import count_by_verdict, trail
from benchkit.ui.widgets.trim_words import (
    MOOD_LOOKS,
    STALE_LOOK,
    TURNS,
    advice_words,
    in_step,
    mood_look,
    plain_reading,
    ring_look,
    target_words,
    where,
)
from tests.ui.scripted import (
    BY_HAND,
    BY_HAND_READING,
    END_VIEW,
    FAILED,
    HOLD,
    NEAR,
    ON,
    ONE_SIDED,
    PASSED,
    SUSPECTED,
    TEXT,
    VIEW,
    live,
    sections,
)


@given(st.lists(st.builds(Choice, value=st.text(max_size=6), label=st.text(max_size=6)), max_size=6))
def test_every_choice_has_a_key_of_its_own(choices: list[Choice]) -> None:
    found = keyed(choices)
    assert [choice for _, choice in found] == choices
    assert len({letter for letter, _ in found}) == len(choices)
    assert all(letter != " " for letter, _ in found), "the space bar takes readings"


def test_usual_words_have_their_first_letters() -> None:
    words = ("again", "go on", "make safe")
    assert [letter for letter, _ in keyed([Choice(value=word, label=word) for word in words])] == ["a", "g", "m"]


@pytest.mark.parametrize("typed", ["yes", "YES", "Yes"])
def test_a_hold_passes_with_the_whole_word(typed: str) -> None:
    assert typed_reply(HOLD, typed) == Reply(choice="yes", text=typed)


@pytest.mark.parametrize("typed", ["y", "ye", "yes.", "ja", "", "done", "ok", "1"])
def test_a_hold_passes_with_nothing_less(typed: str) -> None:
    assert isinstance(typed_reply(HOLD, typed), str)


@given(st.text())
def test_no_other_text_passes_a_hold(typed: str) -> None:
    reply = typed_reply(HOLD, typed)
    if typed.casefold() != "yes":
        assert not isinstance(reply, Reply)


def test_make_safe_typed_at_a_hold_still_wants_its_reason() -> None:
    assert typed_reply(HOLD, "make safe") == HOLD.choices[1]


def test_typed_text_goes_through_as_it_is() -> None:
    assert typed_reply(TEXT, "23 degC") == Reply(choice="done", text="23 degC")
    assert typed_reply(TEXT, "rubbish") == Reply(choice="done", text="rubbish")
    assert isinstance(typed_reply(TEXT, ""), str)


def test_by_hand_may_be_answered_with_nothing_only_without_a_point() -> None:
    assert isinstance(typed_reply(BY_HAND_READING, ""), str)
    switch = Question(item="x", kind="by hand", title="", do="Switch on.", choices=(Choice(value="done", label="on"),))
    assert typed_reply(switch, "") == Reply(choice="done")


def test_the_trail_spells_out_where_we_are() -> None:
    pieces = trail(sections(3, ("pass", "fail", "undecided")), 80)
    text = "".join(piece.text for piece in pieces)
    assert len(text) <= 80
    assert text == "●─▼─▒─ First volts 3/7 ─·─·─·─·"
    assert [piece.role for piece in pieces if piece.role != "line"][:4] == ["pass", "fail", "undecided", "here"]


def test_a_long_title_is_cut_to_the_line() -> None:
    long = tuple(replace(section, title="A title " * 20) for section in sections(2))
    assert len("".join(piece.text for piece in trail(long, 60))) <= 60


def test_spelled_out_the_trail_names_every_section() -> None:
    text = "".join(piece.text for piece in trail(sections(0), 200, spelled=True))
    for section in sections(0):
        assert section.title in text


def test_counts() -> None:
    assert count_by_verdict(["pass", "undecided"]) == "1 passed, 0 failed, 1 undecided"


def test_the_verdicts_keep_their_places() -> None:
    plain = {verdict: verdict_strip(verdict).plain for verdict in ("pass", "undecided", "fail")}
    assert plain["pass"] == " ● PASS │   undecided │   fail │"
    assert plain["undecided"] == "   pass │ ▒ UNDECIDED │   fail │"
    assert plain["fail"] == "   pass │   undecided │ ▼ FAIL │"
    assert verdict_strip(None).plain == "   pass │   undecided │   fail │"


def test_limits_in_words() -> None:
    assert limits_words(PASSED) == "2.310 V to 2.520 V"
    assert limits_words(ONE_SIDED) == "at most 10 %"
    assert limits_words(replace(PASSED, high=None)) == "at least 2.310 V"
    assert limits_words(replace(PASSED, high=None, low=None)) == ""


def test_marks_say_what_else_must_be_known() -> None:
    marks = marks_of(replace(PASSED, from_before=True, overridden="known bad meter lead"))
    assert "before" in marks[0]
    assert "known bad meter lead" in marks[1]


def test_progress() -> None:
    assert progress_words(None, None) == ""
    assert progress_words(1.7, None, width=4) == "████ 100 %"
    assert progress_words(None, 0.2) == "1 s left"
    assert time_words(-3.0) == "0 s"
    assert time_words(120.0) == "2 min 0 s"


def test_the_off_words_follow_the_focus_and_the_supply() -> None:
    assert how_to_switch_off(ON, typing=False) == "F9 or Delete: OFF at once"
    assert how_to_switch_off(ON, typing=True) == "F9: OFF at once"
    assert "BY HAND" in how_to_switch_off(BY_HAND, typing=False)
    assert len("▲▲ SUPPLY UNKNOWN " + how_to_switch_off(BY_HAND, typing=False, narrow=True)) <= 38
    assert len("▲▲ SUPPLY UNKNOWN " + how_to_switch_off(ON, typing=False, narrow=True)) <= 38


def test_where_a_watched_reading_lies() -> None:
    assert where(live(0.02)) == "inside"
    assert where(live(0.001)) == "below"
    assert where(live(0.03)) == "above"
    assert where(replace(live(0.03), value=None)) == "nowhere"


MOODS = tuple(MOOD_LOOKS)


def test_every_mood_has_its_own_shape_and_word() -> None:
    looks = (*MOOD_LOOKS.values(), STALE_LOOK)
    assert len({look.shape for look in looks}) == len({look.word for look in looks}) == len(looks)
    assert all(c.isascii() or c in SAFE for look in looks for c in look.shape)
    assert set(MOODS) == set(get_args(Mood))


@pytest.mark.parametrize("mood", ["wrong way", "no response", "gone", "folded back", "running away"])
def test_what_is_wrong_stops_the_hand(mood: Mood) -> None:
    ring = ring_look(replace(live(0.019), mood=mood, advice="stop", advised_turns=None))
    assert ring is not None
    assert (ring.centre, ring.tone) == ("STOP", "alarm")


def test_the_ring_shows_what_is_advised_or_how_far_it_is() -> None:
    turn = replace(live(0.016), advice="a quarter turn anticlockwise", advised_turns=0.25)
    ring = ring_look(turn)
    assert ring is not None
    assert (ring.share, ring.sense, ring.centre, ring.tone) == (0.25, "anticlockwise", "1/4", "turn")
    stale = ring_look(turn, stale=True)
    assert stale is not None
    assert stale.centre == "STOP"
    soak = ring_look(replace(live(0.02), mood="inside", settled_share=0.63))
    assert soak is not None
    assert (soak.centre, soak.tone) == ("63 %", "calm")
    assert ring_look(replace(live(0.02), mood="inside")) is None


def test_without_advice_the_side_is_said() -> None:
    assert (mood_look(live(0.001)).word, advice_words(live(0.001))) == ("TOO LOW", "MORE bias")
    assert (mood_look(live(0.03)).word, advice_words(live(0.03))) == ("TOO HIGH", "LESS bias")
    assert (mood_look(live(0.02)).word, advice_words(live(0.02))) == ("INSIDE", "")
    assert mood_look(replace(live(0.03), mood="overshot")).word == "OVERSHOT, TOO HIGH"
    assert mood_look(replace(live(0.001), mood="overshot")).word == "OVERSHOT, TOO LOW"
    assert advice_words(live(0.02), stale=True) == "do not turn"
    assert target_words(live(0.02)) == "target 20.00 mV, from 18.00 to 22.00"


def test_opposite_keys_turn_the_screw_back() -> None:
    for one, other in (("left", "right"), ("down", "up"), ("pagedown", "pageup")):
        assert TURNS[one] == -TURNS[other] < 0


def test_the_end_says_what_it_means() -> None:
    assert "failed" in closing_sentence(END_VIEW)
    assert "passed" in closing_sentence(replace(END_VIEW, verdict="pass"))
    assert "undecided" in closing_sentence(replace(END_VIEW, verdict="undecided"))
    stopped = closing_sentence(replace(END_VIEW, verdict="pass", stopped="a rail stayed in its limit."))
    assert "stopped" in stopped
    assert "passed" not in stopped
    assert "Unit 0042" in closing_sentence(replace(END_VIEW, kind="walk"))
    assert "0042" not in closing_sentence(END_VIEW), "a rehearsal proves nothing about a unit with that number"


def test_what_is_still_open_counts_only_the_newest_of_each_item() -> None:
    again = replace(FAILED, verdict="pass")
    assert still_open((NEAR, FAILED)) == (FAILED, NEAR), "what failed stands first"
    assert still_open((FAILED, NEAR, again)) == (NEAR,)
    assert still_open(VIEW.results) == ()


@pytest.mark.parametrize(
    ("value", "target", "text"),
    [
        (5.72e-6, 5.5e-3, "0.006 mV"),
        (21.876e-3, 22e-3, "21.88 mV"),
        (-1.2e-3, 22e-3, "-1.20 mV"),
        (0.4, 22e-3, "400.00 mV"),
        (1.5, 1.0, "1.500 V"),
        (2.5e-4, 3e-4, "250.0 uV"),
    ],
)
def test_a_reading_keeps_the_unit_of_its_target(value: float, target: float, text: str) -> None:
    assert in_step(value, target, "V") == text


@pytest.mark.parametrize(
    ("title", "point", "rest"),
    [
        ("Emitter drops: emitter.upper.1", "emitter.upper.1", "Emitter drops"),
        ("Seen low at the unit: rail to rail", "", "Seen low at the unit: rail to rail"),
        ("Rail to rail, and each rail to 0 V: ohm.rails", "ohm.rails", "Rail to rail, and each rail to 0 V"),
        ("Look the board over", "", "Look the board over"),
        ("", "", ""),
    ],
)
def test_the_point_of_a_title_stands_first(title: str, point: str, rest: str) -> None:
    assert pointed(title) == (point, rest)
    line = result_line(replace(FAILED, title=title)).plain
    assert point in line
    assert line.index(point) <= line.index(FAILED.value_text)


def test_what_broke_in_words() -> None:
    assert broken_words(NOTHING_BROKEN) == "No part of the simulated unit was burnt."
    assert broken_words("a: open; b: short") == "BURNT in the simulated unit: a: open; b: short."


@pytest.mark.parametrize(
    ("value", "high", "shown"),
    [(-410e-9, 0.0012, "0 uV"), (0.00123456, 0.004, "1.235 mV"), (0.5, 20.0, "500 mV"), (12.3456, 20.0, "12.35 V")],
)
def test_a_reading_has_no_more_places_than_a_thousandth_of_its_limits(value: float, high: float, shown: str) -> None:
    assert plain_reading(replace(live(0.02), value=value, low=0.0, high=high)) == shown


def test_a_share_is_drawn_only_where_something_explains_the_readings() -> None:
    told = SUSPECTED.suspects[0]
    for text, bar in (("83 %", True), ("", False)):
        title = suspects_drawn(replace(SUSPECTED, suspects=(replace(told, share_text=text),))).renderables[1]
        assert (("█" in str(title)), ("83 %" in str(title))) == (bar, bar)
