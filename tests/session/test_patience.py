"""A meter that takes its time: the countdown, the way out of it, and that a quick one asks nothing."""

from __future__ import annotations

import asyncio
from concurrent.futures import Future
from typing import Any

import pytest

from benchkit.events import ReadingMissed, ReadingTaken
from benchkit.instruments.meter import RawReading
from benchkit.procedure.actions import Question
from benchkit.session import patience
from benchkit.session.front import Reply
from tests.session.fakes import Run, quick_predictions

ITEM = "power.output-first.output"


@pytest.fixture(autouse=True)
def quickly(monkeypatch: pytest.MonkeyPatch) -> None:
    quick_predictions(monkeypatch)
    monkeypatch.setattr(patience, "FIRST_S", 0.01)
    monkeypatch.setattr(patience, "TICK_S", 0.02)


def slow(run: Run, after: asyncio.Event, tries: list[int]) -> None:
    """Let the first reading of the output wait until `after`."""
    read = run.keeper.read

    def slowly(function: str, range: float | None = None, samples: int = 1) -> Future[RawReading]:
        if run.bench.point != "output" or tries:
            return read(function, range, samples)
        tries.append(1)
        future: Future[Any] = Future()
        answer = read(function, range, samples).result()

        async def later() -> None:
            await after.wait()
            if not future.cancelled():
                future.set_result(answer)

        run.later = asyncio.ensure_future(later())  # type: ignore[attr-defined]
        return future

    run.keeper.read = slowly  # type: ignore[method-assign]


def walked(monkeypatch: pytest.MonkeyPatch, expected: float | None, *choices: str) -> tuple[Run, list[Question]]:
    monkeypatch.setattr(patience, "expected_s", lambda job, function, samples: expected)
    monkeypatch.setattr(patience, "LONG_S", 0.05)
    run = Run()
    asked: list[Question] = []
    left = list(choices)

    async def go() -> None:
        release = asyncio.Event()

        async def answer(question: Question, refused: str) -> Reply | None:
            if question.kind != "watch" or question.point != "output":
                return None
            asked.append(question)
            if refused:
                run.front.refused.append(refused)
            if left:
                return Reply(choice=left.pop(0))
            release.set()
            await asyncio.sleep(30)
            return None

        run.front.answer = answer
        slow(run, release, [])
        await run.run()

    asyncio.run(go())
    return run, asked


def test_it_is_counted_down_and_then_taken(monkeypatch: pytest.MonkeyPatch) -> None:
    run, asked = walked(monkeypatch, 60.0)
    assert [choice.value for choice in asked[0].choices] == ["done", "cancel", "make safe"]
    left = [view.remaining_s for view in run.front.views if view.busy.startswith("The meter reads output")]
    assert left
    assert all(seconds is not None and 0.0 < seconds <= 60.0 for seconds in left)
    assert ITEM in run.front.taken_back, "the question goes when the reading comes"
    assert any(isinstance(event, ReadingTaken) and event.item == ITEM for event in run.keeper.kept)


def test_without_a_time_there_is_no_countdown(monkeypatch: pytest.MonkeyPatch) -> None:
    run, _ = walked(monkeypatch, None)
    late = [view for view in run.front.views if "longer than expected" in view.busy]
    assert late
    assert all(view.remaining_s is None for view in late)


def test_it_can_be_cancelled_and_taken_again(monkeypatch: pytest.MonkeyPatch) -> None:
    run, _ = walked(monkeypatch, 60.0, "cancel")
    (missed,) = [event for event in run.keeper.kept if isinstance(event, ReadingMissed)]
    assert missed.item == ITEM
    assert "cancelled" in missed.problem
    assert run.keeper.kept[-1].name == "closed"


def test_waiting_on_and_nonsense_change_nothing(monkeypatch: pytest.MonkeyPatch) -> None:
    run, asked = walked(monkeypatch, 60.0, "done", "perhaps")
    assert len(asked) == 3
    assert any("'perhaps' is no answer here" in words for words in run.front.refused)
    assert not any(isinstance(event, ReadingMissed) for event in run.keeper.kept)


def test_making_safe_does_not_wait_for_the_meter(monkeypatch: pytest.MonkeyPatch) -> None:
    run, _ = walked(monkeypatch, 60.0, "make safe")
    assert run.session.state.stopped == "the operator chose it while output was being read"


def test_a_quick_meter_asks_nothing() -> None:
    run = Run()
    run.go()
    assert not any(question.kind == "watch" and question.point == "output" for question in run.front.questions)


def test_the_time_comes_from_the_profile() -> None:
    run = Run()

    async def job() -> Any:
        return run.make().job

    made = asyncio.run(job())
    quick, long = patience.expected_s(made, "dc volts", 1), patience.expected_s(made, "ac volts", 1)
    assert quick is not None
    assert long is not None
    assert long > quick > 0.0
    made.setup["meter"] = None
    assert patience.expected_s(made, "dc volts", 1) is None
