"""The hand on the screw: what it makes of the advice on the screen."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from benchkit.rehearsal import turning
from benchkit.rehearsal.turning import HOLD, Turning
from benchkit.session.front import LiveView, Reply


def hand(seed: int = 1, turns: float = 12.0) -> Turning:
    return Turning(turns, np.random.default_rng(seed))


def live(value: float | None = 0.012, *, at_s: float = 10.0, **more: Any) -> LiveView:
    given: dict[str, Any] = {"mood": "turn", "advice": "a quarter turn anticlockwise", "advised_turns": 0.25} | more
    return LiveView(
        point="emitter.upper.1", unit="V", value=value, text="", low=0.018, high=0.022, target=0.020, age_s=0.0,
        inside=value is not None and 0.018 <= value <= 0.022, trend=((at_s, value or 0.0),), **given,
    )  # fmt: skip


def test_it_turns_by_what_is_advised_about_as_well_as_a_hand_does() -> None:
    made = [hand(seed).reply(live()).turns for seed in range(400)]
    assert np.mean(made) == pytest.approx(0.25, rel=0.03)
    assert 0.1 < np.std(made) / 0.25 < 0.2
    assert min(made) > 0.0
    assert hand().reply(live(advised_turns=-1e-6, advice="a touch clockwise")).turns == -turning.LEAST_TURNS


def test_it_looks_before_it_turns_on() -> None:
    one = hand()
    assert one.reply(live(at_s=10.0)).turns > 0.0
    assert one.reply(live(at_s=10.5)) == HOLD
    assert one.reply(live(at_s=10.0 + turning.REACTION_S)).turns > 0.0


def test_it_keeps_its_hand_off_what_is_well_and_takes_it_when_nobody_does() -> None:
    one = hand()
    well = {"mood": "steady", "advice": "leave it", "advised_turns": None}
    replies = [one.reply(live(0.020, at_s=10.0 + 0.25 * n, **well)) for n in range(700)]
    held = replies.index(Reply(choice="take"))
    assert replies[:held] == [HOLD] * held
    assert 0.25 * held == pytest.approx(turning.OWN_TAKE_S, abs=1.0)


@pytest.mark.parametrize(
    ("mood", "value", "said"),
    [
        ("gone", None, "does not come back"),
        ("gone", 0.001, "does not come back"),
        ("no response", 0.004, "does not follow"),
    ],
)
def test_it_waits_for_what_may_come_back_and_gives_up_in_words(mood: str, value: float | None, said: str) -> None:
    one = hand()
    replies: list[Reply] = []
    while not replies or replies[-1].choice != "end":
        replies.append(one.reply(live(value, mood=mood, advice="put the probe back", advised_turns=None)))
    assert said in replies[-1].text
    assert 0.25 * len(replies) == pytest.approx(turning.GONE_S, abs=1.0)
    assert set(replies[:-1]) == {HOLD}


def test_a_probe_that_is_back_is_worked_with() -> None:
    one = hand()
    for _ in range(40):
        assert one.reply(live(None, mood="gone", advice="put the probe back", advised_turns=None)) == HOLD
    assert one.reply(live(at_s=30.0)).turns > 0.0
    for _ in range(120):
        assert one.reply(live(None, mood="gone", advice="put the probe back", advised_turns=None)) == HOLD, "anew"


def test_a_supply_in_its_limit_is_turned_back_from_and_then_given_up() -> None:
    one = hand()
    replies = [
        one.reply(live(at_s=10.0 * n, mood="folded back", advice="the supply is in its limit", advised_turns=-0.5))
        for n in range(1, 5)
    ]
    assert [reply.choice for reply in replies] == ["turn", "turn", "turn", "end"]
    assert all(reply.turns < -0.2 for reply in replies[:3])


def test_a_runaway_is_left_to_the_session() -> None:
    assert hand().reply(live(0.05, mood="running away", advice="off", advised_turns=None)) == HOLD


def test_the_track_has_an_end() -> None:
    one = hand(turns=2.0)
    replies = [one.reply(live(at_s=10.0 * n, advised_turns=1.0)) for n in range(1, 5)]
    assert replies[-1].choice == "end"
    assert "at its end" in replies[-1].text


def test_without_any_picture_there_is_no_reading() -> None:
    assert hand().reply(None).choice == "end"
    assert hand().reply(live(None, advice="")).choice == "end"
