from __future__ import annotations

import pytest

from benchkit.judge.silence import MOST_MORE_TURNS, PATIENCE_S, Silence

NOISE_V = 1e-6
TRACK = 10.0


class From:
    """Units that show nothing before `turns`, and then a millivolt."""

    def __init__(self, turns: float) -> None:
        self.turns = turns

    def least_change(self, value: float, turns: float, noise: float) -> float:
        return 1e-3 if abs(turns) >= self.turns else 0.0


def silence() -> Silence:
    one = Silence(TRACK, lambda turns: f"{abs(turns):g} turns {'clockwise' if turns > 0.0 else 'anticlockwise'}")
    one.told(0.0, 1e-5)
    return one


def turned_until(answers: From | None, words: str) -> float:
    """How far a hand that is known to turn gets until it is told something."""
    one, spent = silence(), 0.0
    while spent < 50.0:
        said = one.look(spent, 1e-5, 0.5, answers, NOISE_V)
        if said is not None and words in said[0]:
            return spent
        one.turned(0.5)
        spent += 0.5
    return spent


def test_nothing_is_said_before_the_slowest_unit_would_have_answered() -> None:
    assert turned_until(From(4.0), "no response yet") == 4.0
    assert turned_until(From(4.0), "stop") == pytest.approx(4.0 + MOST_MORE_TURNS, abs=0.5)


@pytest.mark.parametrize("answers", [From(1000.0), None])
def test_a_whole_track_without_an_answer_is_the_end(answers: From | None) -> None:
    assert turned_until(answers, "stop") == TRACK


def test_what_answers_is_counted_anew() -> None:
    one = silence()
    one.turned(5.0)
    assert one.look(1.0, 2e-3, 0.5, From(4.0), NOISE_V) is None
    one.answered()
    one.told(2.0, 2e-3)
    assert one.look(2.0, 2e-3, 0.5, From(4.0), NOISE_V) is None
    one.turned(4.0)
    assert one.look(3.0, 2e-3, 0.5, From(4.0), NOISE_V) is not None


def test_no_more_is_advised_than_is_left_until_stop() -> None:
    one = silence()
    one.turned(4.0)
    said = one.look(1.0, 1e-5, 5.0, From(4.0), NOISE_V)
    assert said is not None
    assert said[1] == MOST_MORE_TURNS
    one.turned(1.5)
    said = one.look(2.0, 1e-5, 5.0, From(4.0), NOISE_V)
    assert said is not None
    assert said[1] == pytest.approx(0.5)


def test_of_a_real_hand_nobody_knows_and_the_words_carry_the_number() -> None:
    one = silence()
    assert one.look(PATIENCE_S + 1.0, 1e-5, 2.0, From(4.0), NOISE_V) is None
    assert one.hint(1e-5, 2.0, From(4.0), NOISE_V) == "; nothing after 6 turns: stop"
    assert one.hint(1e-5, 2.0, From(1000.0), NOISE_V) == "; nothing after the whole track: stop"
    assert one.hint(1e-5, 2.0, From(2.0), NOISE_V) == ""
    said = one.look(PATIENCE_S + 1.0, 1e-5, 2.0, From(2.0), NOISE_V)
    assert said is not None
    assert "If the screw was turned clockwise" in said[0]
    assert one.look(PATIENCE_S - 1.0, 1e-5, 2.0, From(2.0), NOISE_V) is None


def test_where_every_turn_is_told_nobody_is_asked_whether_the_screw_was_turned() -> None:
    asked, told = silence(), silence()
    told.watches_turns()
    late_s = PATIENCE_S + 1.0
    assert asked.look(late_s, 1e-5, 5.0, From(4.0), NOISE_V) is not None
    assert told.look(late_s, 1e-5, 5.0, From(4.0), NOISE_V) is None
    told.turned(5.0)
    assert told.look(late_s, 1e-5, 5.0, From(4.0), NOISE_V) is not None
