from __future__ import annotations

import asyncio
from dataclasses import replace
from typing import Any

import numpy as np

from benchkit.procedure.actions import Choice, Question
from benchkit.rehearsal import standin
from benchkit.rehearsal.standin import StandIn
from benchkit.session.front import LiveView, Reply, SuspectsView, View
from tests.ui.scripted import DECIDE, ODD_QUESTION, PROBES, SUSPECTED, SUSPECTING, VIEW, WORKING


class Hands:
    def __init__(self) -> None:
        self.moved: list[Any] = []

    def trimmer_to(self, travel: Any) -> None:
        self.moved.append(travel)

    def advance(self, seconds: float) -> None:
        self.moved.append(seconds)


def stand_in(said: list[str] | None = None) -> StandIn:
    say = (lambda line: None) if said is None else said.append
    return StandIn(Hands(), turns=10.0, rng=np.random.default_rng(1), say=say)


def view(suspects: SuspectsView | None = None, *, narrowing: bool = False) -> View:
    return replace(VIEW, suspects=suspects, narrowing=narrowing)


def ask(one: StandIn, *questions: Question) -> list[str]:
    async def all_of_them() -> list[Reply]:
        return [await one.ask(question) for question in questions]

    return [reply.choice for reply in asyncio.run(all_of_them())]


def test_it_tries_again_and_then_takes_the_extra_readings_that_are_offered() -> None:
    one = stand_in()
    one.show(view(SUSPECTED))
    assert ask(one, SUSPECTING, SUSPECTING, SUSPECTING, SUSPECTING, DECIDE) == [
        "again", "probe", "probe", "probe", "make safe",
    ]  # fmt: skip


def test_it_waits_for_suspects_before_it_makes_safe() -> None:
    one, said = stand_in(), []  # type: ignore[var-annotated]
    one = stand_in(said)
    one.show(view(WORKING))
    answered: list[Reply] = []

    async def script() -> None:
        answered.append(await one.ask(DECIDE))
        asking = asyncio.create_task(one.ask(DECIDE))
        await asyncio.sleep(0.2)
        assert not asking.done(), "it waits"
        one.show(view(SUSPECTED))
        answered.append(await asking)

    asyncio.run(script())
    assert [reply.choice for reply in answered] == ["again", "make safe"]
    assert any("92 explanations" in line for line in said)


def test_it_does_not_wait_for_ever(monkeypatch: Any) -> None:
    monkeypatch.setattr(standin, "MOST_PATIENCE_S", 0.1)
    one = stand_in()
    one.show(view(WORKING))
    assert ask(one, DECIDE, DECIDE) == ["again", "make safe"]


def test_it_goes_on_after_an_odd_reading_and_takes_what_is_offered_there_too() -> None:
    one = stand_in()
    one.show(view(SUSPECTED))
    offered = replace(ODD_QUESTION, choices=(*ODD_QUESTION.choices, Choice(value="probe", label="Read spread next")))
    assert ask(one, offered, ODD_QUESTION) == ["probe", "go on"]


def test_it_gives_the_model_time_before_it_places_the_probes() -> None:
    one = stand_in()
    one.show(view(narrowing=True))

    async def script() -> None:
        asking = asyncio.create_task(one.ask(PROBES))
        await asyncio.sleep(0.1)
        assert not asking.done()
        one.show(view())
        assert (await asking).choice == "done"

    asyncio.run(script())


TRIM = replace(DECIDE, kind="trim", item="bias.quarter", title="Bias to a quarter of the target")


def trimming(values: list[float], low: float, high: float) -> list[Reply]:
    """What it does when the meter shows these values, one after each answer."""
    one = stand_in()
    replies: list[Reply] = []

    async def script() -> None:
        for value in values:
            live = LiveView(
                point="emitter.upper.1", unit="V", value=value, text="", low=low, high=high, target=(low + high) / 2.0,
                age_s=0.0, inside=low <= value <= high,
            )  # fmt: skip
            one.show(replace(VIEW, live=live))
            replies.append(await one.ask(TRIM))

    asyncio.run(script())
    return replies


def test_at_the_end_of_the_screw_it_takes_what_is_inside() -> None:
    # The reading only drifts: the screw is at its least-bias end.
    replies = trimming([0.00779, 0.00778, 0.00777, 0.00776], 0.002, 0.008)
    assert [reply.choice for reply in replies] == ["turn", "turn", "turn", "take"]
    assert all(reply.turns < 0.0 for reply in replies[:3])


def test_at_the_end_of_the_screw_it_gives_up_what_is_above() -> None:
    replies = trimming([0.0098, 0.0097, 0.0097, 0.0097], 0.002, 0.008)
    assert replies[-1].choice == "end"
    assert "least-bias end" in replies[-1].text


def test_a_screw_that_answers_is_turned_on() -> None:
    replies = trimming([0.012, 0.011, 0.0098, 0.0088, 0.0051], 0.002, 0.008)
    assert [reply.choice for reply in replies] == ["turn", "turn", "turn", "turn", "take"]
