"""A rail watched down: live and typed, quickly, slowly and not at all."""

from __future__ import annotations

import asyncio
import math
from collections.abc import Callable
from concurrent.futures import Future
from dataclasses import replace

import pytest

from benchkit.events import Judged, ReadingMissed, ReadingTaken
from benchkit.instruments.meter import RawReading
from benchkit.measure.readings import Reading
from benchkit.procedure.actions import Fall, Question
from benchkit.session import falling
from benchkit.session.front import Reply
from benchkit.session.job import only_done
from benchkit.stage.stored import TOO_SLOW
from tests.session.fakes import TROUBLE, FakeKeeper, Run, done, quick_predictions

ITEM = "made-safe.rails-low.rail+"
TAU_S = 22.0


@pytest.fixture(autouse=True)
def quickly(monkeypatch: pytest.MonkeyPatch) -> None:
    quick_predictions(monkeypatch)


def walked(
    monkeypatch: pytest.MonkeyPatch, volts: Callable[[float], float], *, tau_s: float | None = TAU_S, reply: str = ""
) -> tuple[Run, ReadingTaken]:
    """Walk with a rail that falls by a law of the simulated seconds since it was first read."""
    watch = falling.watch

    async def known(session: object, action: Fall) -> object:
        slowest = None if tau_s is None else 1.25 * tau_s
        return await watch(session, replace(action, tau_s=tau_s, slowest_tau_s=slowest))  # type: ignore[arg-type]

    monkeypatch.setattr(falling, "watch", known)
    run = Run()
    first: list[float] = []
    read = FakeKeeper.read

    def falls(function: str, range: float | None = None, samples: int = 1) -> Future[RawReading]:
        if run.session.job.walk.item(run.session.state).id != ITEM:
            return read(run.keeper, function, range, samples)
        if not first:
            first.append(run.bench.seconds)
        value = volts(run.bench.seconds - first[0])
        return done(RawReading(value=value, function=function, meter="a meter", values=(value,)))

    run.keeper.read = falls  # type: ignore[method-assign]

    async def answer(question: Question, refused: str) -> Reply | None:
        if question.kind == "watch":
            if reply and question.item == ITEM:
                return Reply(choice=reply)
            await asyncio.sleep(30)
        if question.kind == "decide" and question.item == ITEM:
            return Reply(choice="go on", text="leave it")
        return None

    run.front.answer = answer
    run.go()
    found = [event for event in run.keeper.kept if isinstance(event, ReadingTaken) and event.item == ITEM]
    assert len(found) == 1
    return run, found[0]


def verdict(run: Run) -> Judged:
    return next(event for event in run.keeper.kept if isinstance(event, Judged) and event.item == ITEM)


def test_a_rail_that_falls_as_it_should(monkeypatch: pytest.MonkeyPatch) -> None:
    run, taken = walked(monkeypatch, lambda s: 35.0 * math.exp(-s / TAU_S))
    assert taken.reading.value is not None
    assert 0.8 < taken.reading.value < 1.0
    assert taken.fell_from_v == pytest.approx(35.0)
    assert taken.fell_s == pytest.approx(TAU_S * math.log(35.0 / taken.reading.value), abs=2.1)
    assert not taken.fell_slowly
    assert verdict(run).verdict == "pass"
    views = [view for view in run.front.views if view.live is not None and view.item == ITEM]
    assert len(views) > 20, "it is shown as it falls"
    for view in views:
        live = view.live
        assert live is not None
        assert live.value is not None
        assert view.remaining_s == pytest.approx(max(0.0, TAU_S * math.log(live.value)), abs=1e-6)
    shares = [view.busy_share for view in views]
    assert all(share is not None for share in shares)
    assert shares == sorted(shares)  # type: ignore[type-var]


def test_an_open_bleed_resistor_shows_and_is_said(monkeypatch: pytest.MonkeyPatch) -> None:
    run, taken = walked(monkeypatch, lambda s: 35.0 * math.exp(-s / (20 * TAU_S)))
    assert taken.fell_slowly
    assert taken.reading.value is not None
    assert taken.reading.value > 1.0
    said = [view for view in run.front.views if view.busy == falling.TOO_SLOW_WORDS]
    assert said
    judged = verdict(run)
    assert judged.verdict == "fail"
    assert "bleed resistor open?" in judged.why


def test_a_rail_that_stays_up_is_not_watched_for_ever(monkeypatch: pytest.MonkeyPatch) -> None:
    run, taken = walked(monkeypatch, lambda s: 35.0, tau_s=None)
    assert taken.reading.value == 35.0
    assert taken.fell_s is not None
    assert falling.LEAST_PATIENCE_S < taken.fell_s < falling.LEAST_PATIENCE_S + 2 * falling.MOST_LOOK_S
    assert verdict(run).verdict == "fail"


def test_it_can_be_taken_as_it_reads(monkeypatch: pytest.MonkeyPatch) -> None:
    _, taken = walked(monkeypatch, lambda s: 35.0, reply="enough")
    assert taken.reading.value == 35.0
    assert taken.fell_s is not None
    assert taken.fell_s < 5.0


def test_an_empty_rail_is_read_once(monkeypatch: pytest.MonkeyPatch) -> None:
    run, taken = walked(monkeypatch, lambda s: 0.02)
    assert (taken.fell_from_v, taken.fell_s, taken.fell_slowly) == (None, None, False)
    assert not any(question.kind == "watch" for question in run.front.questions)


def test_a_meter_that_dies_meanwhile_is_no_low_rail() -> None:
    run = Run()
    read = run.keeper.read
    tries: list[int] = []

    def dies(function: str, range: float | None = None, samples: int = 1) -> Future[RawReading]:
        if run.bench.point == "rail+" and not tries:
            tries.append(1)
            return done(TROUBLE)
        return read(function, range, samples)

    run.keeper.read = dies  # type: ignore[method-assign]
    run.go()
    (missed,) = [event for event in run.keeper.kept if isinstance(event, ReadingMissed)]
    assert "did not answer" in missed.problem


# -- typed in -------------------------------------------------------------------------------------------------------


def test_typed_in_until_it_is_low() -> None:
    run = Run(manual=True)

    def walk_by_hand() -> None:
        replies = iter(("12.1 V", "nonsense", "1.0 V", "0.2 V"))

        async def answer(question: Question, refused: str) -> Reply | None:
            if question.item == ITEM and question.kind == "by hand":
                if "12.1" in question.expected or "12.10" in question.expected:
                    assert "not low yet" in question.expected
                return Reply(choice="done", text=next(replies))
            return await by_hand(question, refused)

        run.front.answer = answer
        run.go()

    walk_by_hand()
    found = [event for event in run.keeper.kept if isinstance(event, ReadingTaken) and event.item == ITEM]
    assert [event.reading.value for event in found] == [0.2]
    assert found[0].fell_from_v == pytest.approx(12.1)
    assert found[0].reading.meter.startswith("by hand")
    assert any("nonsense" in words for words in run.front.refused)


async def by_hand(question: Question, refused: str) -> Reply | None:
    if only_done(question):
        return Reply(choice="done")
    if question.kind == "by hand":
        if question.title.startswith("Set the supply"):
            limit = "2 V" in question.title or "2.00" in question.title
            volts = "0.1 V 50 mA -0.1 V 50 mA limit" if limit else None
            if volts is None:
                rail = question.title.split(":")[1].split(" V")[0].strip()
                volts = f"{rail} V 12 mA -{rail} V 12 mA"
            return Reply(choice="done", text=volts)
        texts = {"V": "0 V", "A": "12 mA", "ohm": "0.5 ohm"}
        if question.point.startswith("ohm"):
            return Reply(choice="done", text=texts["ohm"])
        if question.point.endswith("current"):
            return Reply(choice="done", text=texts["A"])
        if question.point == "emitter.upper.1":
            return Reply(choice="take" if question.choices[0].value == "take" else "done", text="47 mV")
        return Reply(choice="done", text=texts["V"])
    return None


# -- the arithmetic -------------------------------------------------------------------------------------------------


def fall(tau_s: float, seconds: float, step_s: float = 0.5) -> list[tuple[float, float]]:
    return [(k * step_s, 35.0 * math.exp(-k * step_s / tau_s)) for k in range(int(seconds / step_s))]


@pytest.mark.parametrize(("ratio", "slow"), [(0.5, False), (1.0, False), (1.9, False), (2.1, True), (50.0, True)])
def test_too_slowly_is_a_matter_of_the_time_constant(ratio: float, slow: bool) -> None:
    assert TOO_SLOW == 2.0
    assert falling.falls_too_slowly(fall(ratio * TAU_S, 30.0), TAU_S) == slow


def test_too_slowly_needs_a_stretch_that_is_long_enough() -> None:
    assert not falling.falls_too_slowly(fall(50 * TAU_S, 3.0), TAU_S)
    assert not falling.falls_too_slowly(fall(50 * TAU_S, 30.0), None)
    assert not falling.falls_too_slowly(fall(50 * TAU_S, 30.0), 0.0)
    assert falling.falls_too_slowly([(s * 0.5, 35.0) for s in range(60)], TAU_S), "a rail that stays up"
    helped = [*fall(50 * TAU_S, 30.0), *((30.0 + s, 34.0 * math.exp(-s / 10.0)) for s in range(12))]
    assert not falling.falls_too_slowly(helped, TAU_S), "a resistor was put across it"


@pytest.mark.parametrize(
    ("value", "uncertainty", "low"),
    [
        (0.9, 0.01, True),
        (-0.9, 0.01, True),
        (0.99, 0.01, False),
        (1.2, 0.0, False),
        (None, None, False),
        (0.5, None, True),
    ],
)
def test_low_is_low_beyond_the_meters_doubt(value: float | None, uncertainty: float | None, low: bool) -> None:
    reading = Reading(
        point="rail+", value=value, unit="V", standard_uncertainty=uncertainty, meter="m", function="dc volts",
        overload=value is None,
    )  # fmt: skip
    assert falling.is_low(reading, 1.0) == low


def test_words() -> None:
    words, left_s = falling.fall_words(35.0, 1.0, TAU_S, slowly=False)
    assert words == "Falling to 1.0 V."
    assert left_s == pytest.approx(78.2, abs=0.1)
    assert falling.fall_words(35.0, 1.0, TAU_S, slowly=True) == (falling.TOO_SLOW_WORDS, None)
    assert "nobody knows" in falling.fall_words(35.0, 1.0, None, slowly=False)[0]
    assert falling.fall_words(None, 1.0, TAU_S, slowly=False)[1] is None
