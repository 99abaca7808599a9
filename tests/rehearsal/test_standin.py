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
        self.faulty: list[str] = []

    def trimmer_to(self, travel: Any) -> None:
        self.moved.append(travel)

    def advance(self, seconds: float) -> None:
        self.moved.append(seconds)

    def slip(self, seconds: float) -> None:
        self.moved.append(("slip", seconds))

    def truth(self) -> dict[str, Any]:
        return {"faulty": self.faulty, "semiconductors": any("output" in part for part in self.faulty)}


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


def test_it_trims_again_where_that_is_offered() -> None:
    question = replace(DECIDE, choices=(Choice(value="trim again", label="Trim again"), *DECIDE.choices))
    assert ask(stand_in(), question, question) == ["trim again", "trim again"]


def test_what_a_unit_was_found_with_is_noted() -> None:
    found = replace(
        DECIDE,
        item="found.drops.emitter.upper.1",
        choices=(*DECIDE.choices, Choice(value="go on", label="", wants_reason=True)),
    )
    assert ask(stand_in(), found, found) == ["again", "go on"]


PARTS = replace(
    DECIDE,
    kind="parts",
    item="repair.replaced",
    choices=tuple(Choice(value=v, label="") for v in ("no", "semiconductors")),
)


def test_it_says_what_it_has_replaced() -> None:
    one = stand_in()
    assert ask(one, PARTS, replace(PARTS, item="look.before")) == ["no", "no"]
    one._hands.faulty = ["output.upper.1", "emitter.upper.1"]  # type: ignore[attr-defined]
    reply = asyncio.run(one.ask(PARTS))
    assert (reply.choice, reply.text) == ("semiconductors", "output.upper.1, emitter.upper.1")
    one._hands.faulty = ["emitter.upper.1"]  # type: ignore[attr-defined]
    assert ask(one, PARTS) == ["other parts"]
    told = StandIn(Hands(), turns=10.0, rng=np.random.default_rng(1), replaced_before=("other parts", "feed.upper"))
    reply = asyncio.run(told.ask(replace(PARTS, item="look.before")))
    assert (reply.choice, reply.text) == ("other parts", "feed.upper")


def test_it_passes_over_what_is_optional_unless_told_otherwise() -> None:
    choose = replace(PARTS, kind="choose", choices=(Choice(value="no", label=""), Choice(value="yes", label="")))
    assert ask(stand_in(), choose) == ["no"]
    willing = StandIn(Hands(), turns=10.0, rng=np.random.default_rng(1), optional=True)
    assert ask(willing, choose) == ["yes"]


def test_its_probe_slips_as_often_as_it_was_told() -> None:
    hands = Hands()
    one = StandIn(hands, turns=12.0, rng=np.random.default_rng(1), slips=1)

    async def script() -> None:
        for number in range(6):
            live = LiveView(
                point="emitter.upper.1", unit="V", value=0.012, text="", low=0.018, high=0.022, target=0.02, age_s=0.0,
                inside=False, trend=((10.0 * number, 0.012),), advice="a touch", advised_turns=0.1,
            )  # fmt: skip
            one.show(replace(VIEW, live=live))
            await one.ask(TRIM)

    asyncio.run(script())
    assert hands.moved == [("slip", standin.SLIP_S)]
