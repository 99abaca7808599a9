from __future__ import annotations

import asyncio
import math
from collections.abc import Callable
from typing import Any

import pytest

from benchkit.errors import InstrumentError
from benchkit.events import Event, Tripped, Waited
from benchkit.instruments.meter import RawReading
from benchkit.procedure.actions import Question, Wait
from benchkit.session import predictions, soaking
from benchkit.session.front import Reply
from tests.session.fakes import FakeFront, Run, done

POINT = "emitter.upper.1"
LAGS_S = (30.0, 4.0)
SOAK = Wait(
    item="bias.soak", seconds=600.0, reason="Let it warm up.", point=POINT, function="dc volts", unit="V",
    target=0.022, low=0.0198, high=0.0242, until_settled=True, least_s=20.0, drift_limit=8e-6,
)  # fmt: skip


@pytest.fixture(autouse=True)
def lags(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(predictions, "time_constants", lambda design: LAGS_S)


def soak(action: Wait, value: Callable[[float], float], **changes: Any) -> tuple[Run, Event | None]:
    """Soak with a drop that is a function of time."""
    run = Run(manual=changes.pop("manual", False))
    run.front = changes.pop("front", run.front)
    fail: dict[float, Any] = changes.pop("fail", {})
    reads: list[float] = []

    def read(function: str, range: float | None = None, samples: int = 1) -> Any:
        t_s = run.bench.seconds
        reads.append(t_s)
        for moment_s, what in fail.items():
            if moment_s <= t_s < moment_s + 6.0:
                return done(what)
        shown = value(t_s)
        return done(RawReading(value=shown, function=function, meter="a meter", values=(shown,) * samples))

    run.keeper.read = read  # type: ignore[method-assign]

    async def whole() -> Event | None:
        session = run.make()
        session.job.narrow_rarely = True
        event = await soaking.wait(session, action)
        await asyncio.sleep(0)
        return event

    return run, asyncio.run(whole())


def settles(t_s: float) -> float:
    return 0.0215 - 0.006 * math.exp(-t_s / 30.0)


def waited(event: Event | None) -> Waited:
    assert isinstance(event, Waited)
    return event


def test_it_ends_once_the_reading_has_settled_and_says_where() -> None:
    run, event = soak(SOAK, settles)
    end = waited(event)
    assert end.settled
    assert 60.0 < end.seconds < 250.0
    assert (end.point, end.unit) == (POINT, "V")
    assert end.final == pytest.approx(0.0215, abs=2e-4)
    assert end.low is not None
    assert end.high is not None
    assert end.low < 0.0215 < end.high
    assert 10 < len(end.trend) <= 60
    assert end.trend[0][0] == pytest.approx(0.0, abs=10.0)
    assert run.session.rested == (POINT, end.final)
    lives = [view.live for view in run.front.views if view.live is not None]
    assert lives[-1].mood == "steady"
    assert any("will rest at" in live.settles_text for live in lives)
    shares = [live.settled_share for live in lives if live.settled_share is not None]
    assert shares[-1] > 0.9


def test_it_never_ends_before_its_least() -> None:
    from dataclasses import replace

    _, event = soak(replace(SOAK, least_s=90.0), lambda t_s: 0.0215)
    assert waited(event).seconds == pytest.approx(90.0, abs=2.0)


def test_it_ends_at_its_most_and_says_that_it_has_not_settled() -> None:
    from dataclasses import replace

    _, event = soak(replace(SOAK, seconds=40.0), lambda t_s: 0.015 + 2e-5 * t_s)
    assert waited(event).settled is False
    assert waited(event).seconds == pytest.approx(40.0, abs=2.0)


def test_what_rises_faster_and_faster_trips_and_the_supply_goes_off_first() -> None:
    run, event = soak(SOAK, lambda t_s: 0.018 + 0.001 * math.expm1(t_s / 25.0))
    assert event is None
    assert len(run.keeper.offs) == 1
    assert "rises by itself" in run.keeper.offs[0]
    tripped = [push for push in run.session.pushed if isinstance(push, Tripped)]
    assert [push.what for push in tripped] == [POINT]
    assert run.bench.seconds < 120.0
    assert any(view.live is not None and view.live.mood == "running away" for view in run.front.views)


def test_a_slip_and_a_mute_meter_are_told_of_and_waited_through() -> None:
    over = RawReading(value=None, function="dc volts", meter="a meter", values=(), overload=True)
    mute = InstrumentError("timeout", "The meter did not answer")
    run, event = soak(SOAK, settles, fail={30.0: over, 60.0: mute})
    assert waited(event).settled
    words = " ".join(view.live.advice for view in run.front.views if view.live is not None)
    assert "the reading is gone (overload)" in words
    assert "the meter gave no reading" in words


def test_a_plain_dwell_passes_as_long_as_it_is_told() -> None:
    plain = Wait(item="bias.soak", seconds=12.0, reason="Hands off.")
    run, event = soak(plain, lambda t_s: 0.0)
    assert event == Waited(item="bias.soak", seconds=12.0)
    assert run.bench.seconds == 12.0


def test_by_hand_entries_are_asked_for_between_rests() -> None:
    asked: list[float] = []
    run: Run

    async def answer(question: Question, refused: str) -> Reply | None:
        asked.append(0.0)
        if len(asked) == 4:
            return Reply(choice="enough")
        return Reply(choice="done", text="21.5 mV")

    run, event = soak(SOAK, lambda t_s: 0.0, manual=True, front=FakeFront(answer))
    end = waited(event)
    assert end.settled is None
    assert end.seconds == pytest.approx(SOAK.least_s + 3 * soaking.ENTRY_S)
    assert len(end.trend) == 3
    assert [question.kind for question in run.front.questions] == ["by hand"] * 4


def test_by_hand_it_ends_by_itself_when_it_has_settled() -> None:
    typed: list[str] = []

    async def answer(question: Question, refused: str) -> Reply | None:
        typed.append(question.expected)
        return Reply(choice="done", text=f"{21.5 + 0.01 * (len(typed) % 2):.2f} mV")

    _, event = soak(SOAK, lambda t_s: 0.0, manual=True, front=FakeFront(answer))
    assert waited(event).settled
    assert len(typed) == 4
    assert "3 of at least 4 entries" in typed[3]


@pytest.mark.parametrize("many", [3, 60, 61, 500])
def test_a_kept_trend_is_short_and_has_both_ends(many: int) -> None:
    points = tuple((float(n), float(n)) for n in range(many))
    kept = soaking.thinned(points)
    assert len(kept) == min(many, 60)
    assert (kept[0], kept[-1]) == (points[0], points[-1])


def test_by_hand_it_says_why_it_is_not_at_rest_and_leaves_no_stale_figure() -> None:
    typed: list[str] = []

    async def answer(question: Question, refused: str) -> Reply | None:
        typed.append(question.expected)
        return Reply(choice="done", text=f"{21.5 + 0.8 * len(typed):.2f} mV")

    run, event = soak(SOAK, lambda t_s: 0.0, manual=True, front=FakeFront(answer))
    assert not waited(event).settled
    assert any("it still moves 1.6 mV a minute" in words for words in typed)
    assert run.session.moment.live is None
