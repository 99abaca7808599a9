"""The screens against a scripted walk: what is asked, answered, shown, and switched off."""

from __future__ import annotations

import asyncio
import contextlib
import time
from collections.abc import AsyncIterator, Awaitable, Callable
from dataclasses import replace
from pathlib import Path

import pytest
from textual import events
from textual.geometry import Size
from textual.pilot import Pilot
from textual.widgets import Input

from benchkit.errors import InstrumentError
from benchkit.events import Closed
from benchkit.procedure.actions import Choice, Question
from benchkit.procedure.questions import NOTHING_REPLACED, OTHER_PARTS, STOP
from benchkit.session.falling import TOO_SLOW_WORDS
from benchkit.session.front import READ_BY_HAND, Front, Reply, SupplyView
from benchkit.session.supply_view import PULL_THE_PLUG
from benchkit.ui import look
from benchkit.ui.app import BenchApp
from benchkit.ui.entry import Identity
from benchkit.ui.pages.step import StepPage
from benchkit.ui.screens.leave import LeaveScreen
from benchkit.ui.screens.start import StartScreen
from benchkit.ui.screens.walk import WalkScreen
from benchkit.ui.widgets.answer import Answer
from tests.ui import scripted
from tests.ui.scripted import WHO, Bench, Script, app_for, asking

QUESTIONS = (
    scripted.PROBES,
    scripted.CONFIRM,
    scripted.TEXT,
    scripted.BY_HAND_READING,
    scripted.HOLD,
    scripted.DECIDE,
    scripted.TRIM,
    scripted.FALL,
)
LIVE = replace(scripted.TRIM_VIEW, results=scripted.END_VIEW.results)


@pytest.fixture(autouse=True)
def _plain_environment(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("benchkit.ui.app.CLOSE_WITHIN_S", 0.1)
    for name in ("NO_COLOR", "TEXTUAL_THEME", "TEXTUAL", "TEXTUAL_PRESS"):
        monkeypatch.delenv(name, raising=False)


@contextlib.asynccontextmanager
async def running(
    script: Script,
    *,
    identity: Identity | None = WHO,
    size: tuple[int, int] = (80, 24),
    guard_s: float = 0.0,
) -> AsyncIterator[tuple[BenchApp, Pilot[int], Bench]]:
    bench = Bench()
    app = app_for(script, bench, identity=identity, guard_s=guard_s)
    async with app.run_test(size=size) as pilot:
        if identity is not None:
            await until(lambda: bench.front is not None)
        await pilot.pause()
        yield app, pilot, bench


async def until(true: Callable[[], bool], timeout_s: float = 5.0) -> None:
    deadline = time.monotonic() + timeout_s
    while not true():
        assert time.monotonic() < deadline, "it did not happen"
        await asyncio.sleep(0.03)


def run(test: Callable[[], Awaitable[None]]) -> None:
    asyncio.run(test())  # type: ignore[arg-type]


def drawn(app: BenchApp) -> list[str]:
    """What stands on the screen, row by row."""
    width, height = app.size
    rows = [[" "] * width for _ in range(height)]
    for y, strip in enumerate(app.screen._compositor.render_strips()):
        text = "".join(segment.text for segment in strip)
        rows[y][: len(text)] = text
    return ["".join(row) for row in rows]


def shows(app: BenchApp, words: str) -> bool:
    return words in " ".join(" ".join(drawn(app)).replace("█", " ").split())


# --- the way through -------------------------------------------------------------------------------------------------


def test_the_start_takes_who_and_what_and_begins() -> None:
    async def test() -> None:
        async with running(asking(scripted.PROBES), identity=None) as (app, pilot, bench):
            assert isinstance(app.screen, StartScreen)
            assert shows(app, "it is not a safety device")
            assert shows(app, "Where they differ from the screen, they win.")
            assert shows(app, "Tern 40, revision C")
            assert shows(app, "First power-on")
            await pilot.press("enter")
            assert shows(app, "The serial number is still empty.")
            assert bench.front is None
            await pilot.press(*"0042", "enter", *("R", "full_stop", "space"), *"Holm", "enter")
            await until(lambda: bench.front is not None)
            assert bench.identity == Identity(unit="0042", operator="R. Holm")
            await until(lambda: isinstance(app.screen, WalkScreen) and shows(app, "Clip the meter across"))

    run(test)


def test_before_the_first_picture_the_page_says_what_is_being_done() -> None:
    async def test() -> None:
        async def script(front: Front, bench: Bench) -> Closed:
            await bench.off_asked.wait()
            return scripted.closed()

        async with running(script) as (app, _, bench):
            await until(lambda: shows(app, "Getting ready"))
            assert shows(app, "the record is opened and the instruments are reached")
            bench.off_asked.set()

    run(test)


def test_what_was_typed_ahead_and_cut_off_by_a_hold_is_said_and_never_sent() -> None:
    async def test() -> None:
        view = replace(scripted.VIEW, meter=READ_BY_HAND)
        script = asking(scripted.PROBES, scripted.HOLD, scripted.BY_HAND_READING, view=view)
        async with running(script) as (app, pilot, bench):
            await pilot.press("1")
            assert app.walk is not None
            await until(lambda: app.walk is not None and app.walk.page.id == "hold")
            await pilot.press(*"yes", "enter")
            await until(lambda: shows(app, "Read the drop across"))
            assert app.walk.page.answer.query_one(Input).value == ""
            assert len(bench.replies) == 2

    run(test)


def test_why_a_reading_did_not_pass_stands_beside_the_suspects() -> None:
    async def test() -> None:
        view = replace(FAILED_VIEW, suspects=scripted.SUSPECTED)
        async with running(asking(scripted.SUSPECTING, view=view)) as (app, _, _bench):
            await until(lambda: shows(app, "83 %"))
            assert shows(app, "Too high by 7.2 mV.")

    run(test)


def test_a_whole_walk_of_every_kind_of_question() -> None:
    async def test() -> None:
        async with running(asking(*QUESTIONS, view=LIVE)) as (app, pilot, bench):
            answers: list[tuple[tuple[str, ...], Reply]] = [
                (("enter",), Reply(choice="done")),
                (("n",), Reply(choice="no")),
                ((*"23.5", "enter"), Reply(choice="done", text="23.5")),
                ((*"1.1", "space", *"mV", "enter"), Reply(choice="done", text="1.1 mV")),
                (("y", "enter", *"yes", "enter"), Reply(choice="yes", text="yes")),
                (("g", *"lead", "enter"), Reply(choice="go on", text="lead")),
                (("right",), Reply(choice="turn", turns=0.02)),
                (("e",), Reply(choice="enough")),
            ]
            for number, (keys, expected) in enumerate(answers):
                await until(lambda: app._pending is not None and len(bench.replies) == number)  # noqa: B023
                await pilot.pause()
                await pilot.press(*keys)
                await until(lambda: len(bench.replies) > number)  # noqa: B023
                assert bench.replies[-1] == expected
            await until(lambda: shows(app, "leave benchkit"))
            assert bench.offs == []
            await pilot.press("enter")
            await until(lambda: app.return_value is not None)
        assert app.exit_status() == 0

    run(test)


def test_a_step_shows_what_a_person_needs() -> None:
    async def test() -> None:
        async with running(asking(scripted.PROBES)) as (app, _, _bench):
            question = scripted.PROBES
            for words in (question.do, question.caution, question.red, question.black, question.expected, question.why):
                assert shows(app, words), words
            for words in (
                "2.412 V",
                "● PASS",
                "2.310 V",
                "2.520 V",
                "── SUPPLY OFF",
                "First volts 3/7",
                "57 lines kept",
            ):
                assert shows(app, words), words

    run(test)


SCENES = (
    (scripted.PROBES, replace(scripted.VIEW, results=(scripted.FAILED,))),
    (scripted.HOLD, scripted.VIEW),
    (scripted.DECIDE, replace(scripted.VIEW, results=scripted.END_VIEW.results, supply=scripted.ON)),
    (scripted.TRIM, scripted.TRIM_VIEW),
    (scripted.TRIM, replace(scripted.TRIM_VIEW, live=scripted.live(-0.5))),
    (scripted.BY_HAND_READING, replace(scripted.VIEW, supply=scripted.UNKNOWN)),
    (scripted.FALL, scripted.FALL_VIEW),
    (scripted.FALL, replace(scripted.FALL_VIEW, live=None, busy="Reading.", busy_share=None, remaining_s=None)),
)


@pytest.mark.parametrize("size", [(80, 24), (120, 40), (40, 12), (30, 8)])
def test_only_characters_that_console_fonts_hold_and_the_off_line_always(size: tuple[int, int]) -> None:
    async def script(front: Front, bench: Bench) -> Closed:
        for question, view in SCENES:
            front.show(view)
            bench.replies.append(await front.ask(question))
        return scripted.closed()

    async def test() -> None:
        async with running(script, size=size) as (app, pilot, bench):
            for number, (_, view) in enumerate(SCENES):
                await until(lambda: app._pending is not None and len(bench.replies) == number)  # noqa: B023
                await pilot.pause(0.15)
                rows = drawn(app)
                odd = {character for row in rows for character in row if not character.isascii()} - look.SAFE
                assert odd == set()
                bottom = " ".join(rows[-3:])
                assert look.SUPPLY_WORDS[view.supply.energised] in bottom
                assert "F9" in bottom
                assert "OFF" in bottom
                assert ("too small" in " ".join(rows)) == (size == (30, 8))
                app.answered(Reply(choice="done"))

    run(test)


def test_characters_of_start_leave_and_end() -> None:
    async def test() -> None:
        async def end(front: Front, bench: Bench) -> Closed:
            front.show(scripted.END_VIEW)
            return scripted.closed(1, "fail")

        for size in ((40, 12),):
            async with running(asking(scripted.PROBES), identity=None, size=size) as (app, _, _bench):
                assert {c for row in drawn(app) for c in row if not c.isascii()} <= look.SAFE
            on = replace(scripted.VIEW, supply=scripted.ON)
            async with running(asking(scripted.PROBES, view=on), size=size) as (app, pilot, _bench):
                await pilot.press("ctrl+q")
                await until(lambda: isinstance(app.screen, LeaveScreen))
                await pilot.pause()
                assert "SUPPLY ON" in " ".join(drawn(app)[-3:])
                assert {c for row in drawn(app) for c in row if not c.isascii()} <= look.SAFE
            async with running(end, size=size) as (app, pilot, _bench):
                await until(lambda: shows(app, "▼ FAIL"))
                assert {c for row in drawn(app) for c in row if not c.isascii()} <= look.SAFE
                await pilot.press("enter")
                await until(lambda: app.return_value is not None)
            assert app.exit_status() == 1

    run(test)


def test_a_question_that_is_refused_keeps_what_was_typed() -> None:
    async def test() -> None:
        async def script(front: Front, bench: Bench) -> Closed:
            front.show(scripted.VIEW)
            bench.replies.append(await front.ask(scripted.TEXT))
            bench.replies.append(await front.ask(scripted.TEXT, "15 degC to 35 degC was expected."))
            return scripted.closed()

        async with running(script) as (app, pilot, bench):
            await pilot.press(*"99", "enter")
            await until(lambda: shows(app, "15 degC to 35 degC was expected."))
            await pilot.press("backspace", "backspace", *"21", "enter")
            await until(lambda: len(bench.replies) == 2)
            assert [reply.text for reply in bench.replies] == ["99", "21"]

    run(test)


def test_a_cancelled_question_goes_away_and_its_keys_do_nothing() -> None:
    async def test() -> None:
        looked = asyncio.Event()

        async def script(front: Front, bench: Bench) -> Closed:
            front.show(scripted.VIEW)
            asked = asyncio.ensure_future(front.ask(scripted.CONFIRM))
            await bench.off_asked.wait()
            asked.cancel()
            await asyncio.wait({asked})
            front.show(replace(scripted.VIEW, busy="Switching off."))
            await looked.wait()
            bench.replies.append(await front.ask(scripted.TEXT))
            return scripted.closed()

        async with running(script) as (app, pilot, bench):
            await until(lambda: shows(app, "protective earth"))
            await pilot.press("f9")
            await until(lambda: shows(app, "Switching off."))
            assert not shows(app, "protective earth")
            await pilot.press("y")
            assert bench.replies == []
            looked.set()
            await until(lambda: shows(app, "How warm"))
            await pilot.press("9", "enter")
            await until(lambda: bench.replies == [Reply(choice="done", text="9")])

    run(test)


def test_keys_pressed_before_a_question_could_be_read_do_not_answer_it() -> None:
    async def test() -> None:
        async with running(asking(scripted.CONFIRM), guard_s=30.0) as (app, pilot, bench):
            await until(lambda: app._pending is not None)
            await pilot.press("y", "enter")
            assert bench.replies == []
            app.screen.query_one("#step Answer", Answer)._guard_s = 0.0
            await pilot.press("y")
            await until(lambda: bench.replies == [Reply(choice="yes")])

    run(test)


def test_a_reason_is_asked_for_and_can_be_taken_back() -> None:
    async def test() -> None:
        async with running(asking(scripted.DECIDE)) as (app, pilot, bench):
            await pilot.press("g", "enter")
            assert shows(app, "A reason is needed")
            await pilot.press("escape")
            await pilot.pause(0.2)
            await pilot.press("a")
            await until(lambda: bench.replies == [Reply(choice="again")])

    run(test)


def test_parts_are_asked_for_as_parts_and_not_as_a_reason() -> None:
    async def test() -> None:
        parts = Question(
            item="p", kind="parts", title="Which?", do="", choices=(NOTHING_REPLACED, OTHER_PARTS, STOP)
        )  # fmt: skip
        async with running(asking(parts)) as (app, pilot, bench):
            await until(lambda: app._pending is not None)
            await pilot.press("o")
            await until(lambda: shows(app, "named next: type all the parts that were replaced, Enter keeps it"))
            await pilot.press("enter")
            assert shows(app, "What is needed is all the parts that were replaced; Esc goes back.")
            await pilot.press("R", "1", "enter")
            await until(lambda: bench.replies == [Reply(choice="other parts", text="R1")])

    run(test)


# --- off and out -----------------------------------------------------------------------------------------------------


def test_f9_switches_off_whatever_has_the_focus() -> None:
    async def test() -> None:
        view = replace(LIVE, supply=scripted.ON)
        async with running(asking(*QUESTIONS, view=view)) as (app, pilot, bench):
            for number, _ in enumerate(QUESTIONS):
                await until(lambda: app._pending is not None and len(bench.replies) == number)  # noqa: B023
                await pilot.press("f9")
                assert bench.offs == ["the operator asked for off"] * (number + 1)
                assert shows(app, "OFF HAS BEEN ASKED FOR")
                assert len(bench.replies) == number
                app.answered(Reply(choice="done"))

    run(test)


def test_f9_works_while_a_reason_is_typed_and_before_leaving_and_at_the_start() -> None:
    async def test() -> None:
        on = replace(scripted.VIEW, supply=scripted.ON)
        async with running(asking(scripted.DECIDE, view=on)) as (app, pilot, bench):
            await pilot.press("g", "x", "f9")
            assert isinstance(app.focused, Input)
            assert len(bench.offs) == 1
            await pilot.press("ctrl+q")
            await until(lambda: isinstance(app.screen, LeaveScreen))
            await pilot.press("f9", "delete", "space")
            assert len(bench.offs) == 3
        async with running(asking(scripted.DECIDE), identity=None) as (app, pilot, bench):
            await pilot.press("4", "f9")
            assert len(bench.offs) == 1
            assert shows(app, "F9 SWITCHED NOTHING")
            assert not shows(app, "OFF HAS BEEN ASKED FOR")
            await pilot.press("enter", "R", "enter")
            await until(
                lambda: bench.front is not None and isinstance(app.screen, WalkScreen) and app.supply is not None
            )
            await pilot.pause()
            assert not shows(app, "F9 SWITCHED NOTHING")

    run(test)


def test_delete_switches_off_unless_somebody_types_and_the_space_bar_never_does() -> None:
    async def test() -> None:
        on = replace(scripted.VIEW, supply=scripted.ON)
        async with running(asking(scripted.CONFIRM, view=on)) as (app, pilot, bench):
            assert "Delete" in drawn(app)[-2]
            await pilot.press("space")
            assert bench.offs == []
            await until(lambda: shows(app, "The space bar takes a reading"))
            await pilot.press("delete")
            assert len(bench.offs) == 1
            assert bench.replies == []
        async with running(asking(scripted.TEXT, view=on)) as (app, pilot, bench):
            await pilot.pause(0.15)
            assert "Delete" not in drawn(app)[-2]
            await pilot.press("2", "space", "5", "delete", "enter")
            await until(lambda: bench.replies == [Reply(choice="done", text="2 5")])
            assert bench.offs == []
        async with running(asking(scripted.CONFIRM)) as (app, pilot, bench):
            await pilot.press("delete")
            assert bench.offs == [], "there is nothing to switch off, and a slip must not end a walk"

    run(test)


@pytest.mark.parametrize(
    ("supply", "key"), [(scripted.ON, "ctrl+q"), (scripted.UNKNOWN, "ctrl+c"), (scripted.BY_HAND, "ctrl+q")]
)
def test_leaving_asks_while_the_supply_may_be_on_and_stays_by_default(supply: SupplyView, key: str) -> None:
    async def test() -> None:
        async with running(asking(scripted.TEXT, view=replace(scripted.VIEW, supply=supply))) as (app, pilot, bench):
            await pilot.press(key)
            await until(lambda: isinstance(app.screen, LeaveScreen))
            await pilot.press("enter")
            await until(lambda: isinstance(app.screen, WalkScreen))
            assert bench.offs == []
            await pilot.press(key)
            await until(lambda: isinstance(app.screen, LeaveScreen))
            await pilot.press("escape")
            await until(lambda: isinstance(app.screen, WalkScreen))
            await pilot.press(key)
            await until(lambda: isinstance(app.screen, LeaveScreen))
            await pilot.press("y")
            await until(lambda: bench.offs == ["the operator left"])
            await until(lambda: app.return_value is not None)
        assert app.exit_status() == 4

    run(test)


def test_leaving_while_off_needs_no_question_and_waits_for_the_record_to_close(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.setattr("benchkit.ui.app.CLOSE_WITHIN_S", 3.0)

    async def test() -> None:
        done: list[str] = []

        async def script(front: Front, bench: Bench) -> Closed:
            front.show(scripted.VIEW)
            asked = asyncio.ensure_future(front.ask(scripted.CONFIRM))
            await bench.off_asked.wait()
            asked.cancel()
            await asyncio.wait({asked})
            await asyncio.sleep(0.3)
            done.append("closed")
            return scripted.closed(4)

        async with running(script) as (app, pilot, bench):
            await pilot.press("ctrl+q")
            await until(lambda: app.return_value is not None)
            assert bench.offs == ["the operator left"]
            assert done == ["closed"]
        assert app.exit_status() == 4

    run(test)


def test_a_walk_that_does_not_end_is_left_all_the_same() -> None:
    async def test() -> None:
        begun = time.monotonic()
        async with running(asking(scripted.CONFIRM)) as (app, pilot, bench):
            await pilot.press("ctrl+q")
            await until(lambda: app.return_value is not None, 8.0)
            assert bench.offs == ["the operator left"]
        assert app.exit_status() == 4
        assert time.monotonic() - begun < 6.0

    run(test)


def test_an_error_of_the_walk_switches_off_and_says_why() -> None:
    async def test() -> None:
        async def script(front: Front, bench: Bench) -> Closed:
            raise InstrumentError("link lost", "The supply's link broke", "", "Switch it off by hand")

        async with running(script) as (app, _, bench):
            await until(lambda: app.return_value is not None)
            assert bench.offs == ["the walk can't go on"]
        assert app.exit_status() == 3
        assert "Switch it off by hand." in app.last_words

    run(test)


@pytest.mark.parametrize("where", ["walk", "heartbeat", "show"])
def test_an_error_of_our_own_switches_off_first_and_leaves_a_log(where: str, tmp_path: Path) -> None:
    bench = Bench()

    async def start(front: Front, identity: Identity) -> Closed:
        if where == "walk":
            raise RuntimeError("boom")
        front.show(scripted.VIEW if where == "heartbeat" else replace(scripted.VIEW, sections=None))  # type: ignore[arg-type]
        await front.ask(scripted.CONFIRM)
        return scripted.closed()

    def beat() -> None:
        if where == "heartbeat":
            raise RuntimeError("boom")

    app = BenchApp(
        start, off_now=bench.off_now, heartbeat=beat, opening=scripted.OPENING, identity=WHO, log_dir=tmp_path / "logs"
    )

    async def test() -> None:
        with pytest.raises((RuntimeError, TypeError)):
            async with app.run_test(size=(80, 24)):
                await until(lambda: app.crash is not None)

    run(test)
    assert bench.offs[0] == "an error of benchkit's own"
    assert app.exit_status() == 5
    [log] = (tmp_path / "logs").iterdir()
    assert "Traceback" in log.read_text(encoding="utf-8")
    assert str(log) in app.last_words
    assert "Traceback" not in app.last_words


def test_an_off_that_fails_does_not_stop_the_way_out() -> None:
    async def start(front: Front, identity: Identity) -> Closed:
        front.show(scripted.VIEW)
        await front.ask(scripted.CONFIRM)
        return scripted.closed()

    def off(reason: str) -> None:
        raise OSError("pipe broken")

    app = BenchApp(start, off_now=off, heartbeat=lambda: None, opening=scripted.OPENING, identity=WHO, guard_s=0.0)

    async def test() -> None:
        async with app.run_test(size=(80, 24)) as pilot:
            await pilot.press("f9")
            await pilot.press("ctrl+q")
            await until(lambda: app.return_value is not None, 8.0)

    run(test)
    assert app.exit_status() == 4


# --- time and size ---------------------------------------------------------------------------------------------------


def test_the_heart_beats_at_least_four_times_a_second_while_readings_pour_in() -> None:
    async def test() -> None:
        async def script(front: Front, bench: Bench) -> Closed:
            asked = asyncio.ensure_future(front.ask(scripted.TRIM))
            for number in range(1000):
                front.show(replace(scripted.TRIM_VIEW, live=scripted.live(0.01 + number * 1e-5), kept=number))
                await asyncio.sleep(0.01)
            asked.cancel()
            return scripted.closed()

        async with running(script) as (app, _, bench):
            await asyncio.sleep(0.3)
            lags = []
            beats, begun = bench.beats, time.monotonic()
            while time.monotonic() - begun < 2.0:
                before = time.monotonic()
                await asyncio.sleep(0.01)
                lags.append(time.monotonic() - before - 0.01)
            assert bench.beats - beats >= 8
            lags.sort()
            assert lags[len(lags) // 2] < 0.1
            assert shows(app, "MORE bias") or shows(app, "INSIDE") or shows(app, "LESS bias")

    run(test)


def test_a_watched_reading_that_stops_coming_is_called_stale() -> None:
    async def test() -> None:
        async with running(asking(scripted.TRIM, view=scripted.TRIM_VIEW)) as (app, _, _bench):
            assert shows(app, "├●┤ INSIDE")
            await until(lambda: shows(app, "STALE") and shows(app, "NO FRESH READING do not turn"), 4.0)
            assert not shows(app, "INSIDE")

    run(test)


def test_too_small_says_so_answers_nothing_and_comes_back() -> None:
    async def test() -> None:
        on = replace(scripted.VIEW, supply=scripted.ON)
        async with running(asking(scripted.CONFIRM, view=on)) as (app, pilot, bench):
            await pilot.resize_terminal(30, 8)
            await until(lambda: shows(app, "too small"))
            await pilot.press("y", "enter")
            assert bench.replies == []
            await pilot.press("f9")
            assert len(bench.offs) == 1
            await pilot.resize_terminal(80, 24)
            await until(lambda: shows(app, "protective earth"))
            await pilot.press("y")
            await until(lambda: bench.replies == [Reply(choice="yes")])

    run(test)


def test_many_sizes_in_a_row() -> None:
    async def test() -> None:
        async with running(asking(scripted.TRIM, view=LIVE)) as (app, pilot, bench):
            for number in range(12):
                size = Size(20 + (number * 37) % 130, 5 + (number * 11) % 45)
                app.post_message(events.Resize(size, size))
                await asyncio.sleep(0.005)
            await pilot.resize_terminal(80, 24)
            await pilot.pause(0.2)
            await pilot.press("t")
            await until(lambda: bench.replies == [Reply(choice="take")])

    run(test)


def test_more_than_fits_is_said_and_can_be_reached() -> None:
    async def test() -> None:
        long = replace(scripted.PROBES, why="A very long reason. " * 60 + "The very end.")
        async with running(asking(long)) as (app, pilot, bench):
            await until(lambda: shows(app, "arrow keys: more of the sheet"))
            assert not shows(app, "The very end.")
            for _ in range(8):
                await pilot.press("pagedown")
            await until(lambda: shows(app, "The very end."))
            await pilot.press("enter")
            await until(lambda: bench.replies == [Reply(choice="done")])

    run(test)


def test_without_a_walk_of_choices_nothing_is_taken() -> None:
    async def test() -> None:
        bare = Question(item="x", kind="confirm", title="", do="Well?", choices=(Choice(value="yes", label="yes"),))
        async with running(asking(bare)) as (_, pilot, bench):
            await pilot.press("q", "1", "home", "f5")
            assert bench.replies == []

    run(test)


# --- what the model says of this unit --------------------------------------------------------------------------------

FAILED_VIEW = replace(scripted.VIEW, results=(scripted.PASSED, scripted.FAILED), item="upper", supply=scripted.ON)


def test_suspects_come_while_the_question_stands_and_a_half_typed_reason_stays() -> None:
    async def test() -> None:
        arrived = asyncio.Event()

        async def script(front: Front, bench: Bench) -> Closed:
            front.show(replace(FAILED_VIEW, suspects=scripted.WORKING))
            asking = asyncio.ensure_future(front.ask(scripted.DECIDE))
            await arrived.wait()
            asking.cancel()
            front.show(replace(FAILED_VIEW, suspects=scripted.SUSPECTED))
            bench.replies.append(await front.ask(scripted.SUSPECTING))
            await asyncio.sleep(60)
            return scripted.closed()

        async with running(script) as (app, pilot, bench):
            await until(lambda: shows(app, "The model works out what would explain the readings."))
            assert shows(app, "read it again")
            await pilot.press("g", *"known")
            arrived.set()
            await until(lambda: shows(app, "emitter.upper.1 open"))
            await until(lambda: shows(app, "83 %"))
            assert shows(app, "reads 0.000 V, expected 0.000 V; healthy would read 12.10 mV")
            entry = app.screen.query_one("#decide Input", Input)
            assert (entry.value, entry.has_focus) == ("known", True)
            await pilot.press("1", "enter")
            await until(lambda: bool(bench.replies))
            assert bench.replies == [Reply(choice="go on", text="known1")]

    run(test)


def test_the_extra_reading_is_one_key() -> None:
    async def test() -> None:
        view = replace(FAILED_VIEW, suspects=scripted.SUSPECTED)
        async with running(asking(scripted.SUSPECTING, view=view), size=(120, 40)) as (app, pilot, bench):
            await until(lambda: shows(app, "Read driver.upper.vbe next"))
            for words in (
                "Most telling next: driver.upper.vbe",
                "14 faults could not have shown yet",
                "no single fault",
            ):
                assert shows(app, words), words
            await pilot.press("p")
            await until(lambda: bool(bench.replies))
            assert bench.replies == [Reply(choice="probe")]

    run(test)


@pytest.mark.parametrize("size", [(80, 24), (120, 40), (40, 12)])
def test_off_is_one_key_while_suspects_are_worked_out(size: tuple[int, int]) -> None:
    async def test() -> None:
        view = replace(FAILED_VIEW, suspects=scripted.WORKING)
        async with running(asking(scripted.DECIDE, view=view), size=size) as (_, pilot, bench):
            await pilot.press("f9")
            await until(lambda: bool(bench.offs))

    run(test)


def test_an_odd_reading_shows_both_limits_in_words_and_goes_on_by_enter() -> None:
    async def test() -> None:
        view = replace(scripted.VIEW, results=(scripted.ONE_SIDED, scripted.ODD), item="spread")
        async with running(asking(scripted.ODD_QUESTION, view=view)) as (app, pilot, bench):
            await until(lambda: shows(app, "this unit 2.420 V to 2.470 V: ODD, it reads outside"))
            assert shows(app, "design 2.310 V")
            await pilot.press("enter")
            await until(lambda: bool(bench.replies))
            assert bench.replies == [Reply(choice="go on")]

    run(test)


def test_the_reading_to_come_shows_both_limits_when_they_come() -> None:
    async def test() -> None:
        async with running(asking(scripted.PROBES)) as (app, _, bench):
            assert bench.front is not None
            await until(lambda: shows(app, "expect 0.00 mV to 1.20 mV"))
            bench.front.show(replace(scripted.VIEW, aim=scripted.AIM))
            await until(lambda: shows(app, "this unit 80.00 uV to 140.0 uV"))
            assert shows(app, "design 0.00 mV to 1.20 mV")

    run(test)


def test_the_end_says_why_it_is_undecided_and_who_is_suspected() -> None:
    async def test() -> None:
        view = replace(
            scripted.VIEW, results=(scripted.PASSED,), suspects=scripted.SUSPECTED, verdict="undecided", exit_status=1,
            why="Every reading passed, but together they fit emitter.upper.1: open better than a good unit.",
        )  # fmt: skip

        async def script(front: Front, bench: Bench) -> Closed:
            front.show(view)
            await asyncio.sleep(60)
            return scripted.closed(1, "undecided")

        async with running(script, size=(120, 40)) as (app, _, _):
            await until(lambda: shows(app, "is undecided. Every reading passed"))
            assert shows(app, "83 % emitter.upper.1 open")

    run(test)


# --- watched by itself, tight sheets, the end ----------------------------------------------------------------------


def test_a_rail_that_falls_is_shown_with_the_time_that_is_left() -> None:
    async def test() -> None:
        async with running(asking(scripted.FALL, view=scripted.FALL_VIEW)) as (app, pilot, bench):
            await until(lambda: shows(app, "55 s left"))
            for words in (
                "Falling to 1.0 V.",
                "29 %",
                "hands off the circuit",
                "positive rail",
                "rail+",
                "Never a short",
            ):
                assert shows(app, words), words
            assert not shows(app, "Go on watching"), "it goes on by itself"
            await pilot.press("enter")
            assert bench.replies == [], "no slip of a key takes it"
            assert bench.front is not None
            slow = replace(scripted.FALL_VIEW, busy=TOO_SLOW_WORDS, busy_share=None, remaining_s=None)
            bench.front.show(slow)
            await until(lambda: shows(app, "It falls too slowly: bleed resistor open?"))
            await pilot.press("e")
            await until(lambda: bench.replies == [Reply(choice="enough")])

    run(test)


def test_a_long_step_takes_the_room_of_the_last_results_drawing() -> None:
    async def test() -> None:
        long = replace(scripted.PROBES, caution="Take care of this and of that. " * 9)
        async with running(asking(long, scripted.CONFIRM)) as (app, pilot, _bench):
            page = app.screen.query_one("#step", StepPage)
            await until(lambda: page.has_class("tight"))
            await pilot.pause(0.3)
            for words in (long.red, long.black, long.expected, "2.412 V", "● PASS"):
                assert shows(app, words), words
            assert not app.screen.query_one("#step .outcome-gauge").display
            await pilot.press("enter")
            await until(lambda: not page.has_class("tight"))
            await until(lambda: shows(app, "2.310 V"))

    run(test)


@pytest.mark.parametrize("size", [(80, 24), (120, 40)])
def test_a_failure_names_its_point_and_a_message_is_whole(size: tuple[int, int]) -> None:
    async def test() -> None:
        failed = replace(scripted.FAILED, title="Emitter resistor drops with a long title: emitter.upper.1")
        words = "Tripped: rail+ in its limit of 45 mA. Discharge, and find the cause: no second try at a higher limit."
        view = replace(scripted.VIEW, results=(failed,), message=words, item=failed.item)
        async with running(asking(scripted.DECIDE, view=view), size=size) as (app, _pilot, _bench):
            await until(lambda: shows(app, "emitter.upper.1"))
            (row,) = [row for row in drawn(app) if "this reading" in row]
            assert "emitter.upper.1" in row
            assert failed.value_text in row
            assert shows(app, "no second try at a higher limit.")

    run(test)


def test_the_end_of_a_rehearsal_names_what_burnt() -> None:
    async def test() -> None:
        view = replace(scripted.END_VIEW, kind="rehearsal", broken="output.upper.1: collector-emitter short")

        async def script(front: Front, bench: Bench) -> Closed:
            front.show(view)
            await asyncio.sleep(30)
            return scripted.closed()

        async with running(script, size=(80, 34)) as (app, _pilot, _bench):
            await until(lambda: shows(app, "BURNT in the simulated unit: output.upper.1: collector-emitter short."))

    run(test)


# --- what is said of the supply ------------------------------------------------------------------------------------

HAND_ON = replace(scripted.BY_HAND, label="SUPPLY ON, YOU SAID")
HAND_NEVER = replace(
    scripted.BY_HAND, energised="unknown", label="SUPPLY IN YOUR HANDS", hint="off BY HAND", calm=True, never_on=True
)
MAINS_ON = replace(scripted.BY_HAND, energised="unknown", label="MAINS ON (you said)", hint=PULL_THE_PLUG)


def test_before_the_walk_nobody_claims_that_the_supply_is_off(capsys: pytest.CaptureFixture[str]) -> None:
    async def test() -> None:
        async with running(asking(scripted.PROBES), identity=None) as (app, pilot, bench):
            await pilot.pause()
            assert shows(app, "SUPPLY NOT ASKED YET")
            assert not shows(app, "SUPPLY OFF")
            assert not shows(app, "nothing has been switched on")
            await pilot.press("ctrl+q")
            await until(lambda: app.return_value is not None)
            assert app.last_words == "The rehearsal was not begun."
            assert bench.front is None

    run(test)


@pytest.mark.parametrize(
    ("supply", "words"),
    [
        (HAND_ON, "F9 SWITCHES NOTHING HERE: switch it off by hand, now."),
        (MAINS_ON, "F9 SWITCHES NOTHING HERE: pull the mains plug, now."),
        (HAND_NEVER, ""),
    ],
)
def test_off_is_not_said_to_be_asked_for_where_nothing_can_be_asked(supply: SupplyView, words: str) -> None:
    async def test() -> None:
        async with running(asking(scripted.CONFIRM, view=replace(scripted.VIEW, supply=supply))) as (app, pilot, bench):
            await until(lambda: shows(app, supply.label))
            assert not shows(app, "SUPPLY UNKNOWN")
            await pilot.press("f9")
            await pilot.pause()
            assert bench.offs == ["the operator asked for off"]
            assert not shows(app, "OFF HAS BEEN ASKED FOR")
            assert shows(app, words) if words else not shows(app, "F9 SWITCHES NOTHING")

    run(test)


def test_a_hand_supply_that_was_never_on_is_left_like_one_that_is_off() -> None:
    async def test() -> None:
        view = replace(scripted.VIEW, supply=HAND_NEVER)
        async with running(asking(scripted.CONFIRM, view=view)) as (app, pilot, bench):
            await pilot.press("delete")
            assert bench.offs == []
            await pilot.press("ctrl+q")
            await until(lambda: app.return_value is not None)
            assert bench.offs == ["the operator left"]

    run(test)


@pytest.mark.parametrize(
    ("supply", "known"), [(HAND_ON, "switch it off BY HAND before"), (MAINS_ON, "PULL THE PLUG before")]
)
def test_leaving_does_not_offer_to_switch_off_what_it_cannot(supply: SupplyView, known: str) -> None:
    async def test() -> None:
        async with running(asking(scripted.CONFIRM, view=replace(scripted.VIEW, supply=supply))) as (app, pilot, _):
            await pilot.press("ctrl+q")
            await until(lambda: isinstance(app.screen, LeaveScreen))
            await pilot.pause()
            assert shows(app, known)
            assert not shows(app, "switch off and leave")
            assert not shows(app, "Leaving switches it off")

    run(test)


def test_whoever_leaves_is_asked_nothing_more_and_told_that_the_walk_ends_here(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("benchkit.ui.app.CLOSE_WITHIN_S", 3.0)
    monkeypatch.setattr("benchkit.ui.app.CLOSE_WHEN_OFF_S", 3.0)

    async def test() -> None:
        seen = asyncio.Event()

        async def script(front: Front, bench: Bench) -> Closed:
            front.show(scripted.VIEW)
            asked = asyncio.ensure_future(front.ask(scripted.PROBES))
            await bench.off_asked.wait()
            asked.cancel()
            await asyncio.wait({asked})
            front.show(replace(scripted.VIEW, message="The walk stays where it is.", kept=58))
            asked = asyncio.ensure_future(front.ask(scripted.TEXT))
            await seen.wait()
            asked.cancel()
            return scripted.closed(4)

        async with running(script) as (app, pilot, bench):
            await until(lambda: shows(app, "Clip the meter across"))
            await pilot.press("ctrl+c")
            await bench.off_asked.wait()
            await until(lambda: shows(app, "58 lines kept"))
            await asyncio.sleep(0.3)
            assert shows(app, "The walk ends here")
            assert not shows(app, "stays where it is")
            assert not shows(app, scripted.TEXT.do)
            seen.set()
            await until(lambda: app.return_value is not None)

    run(test)


def test_a_result_from_before_a_stop_is_called_that() -> None:
    async def script(front: Front, bench: Bench) -> Closed:
        front.show(scripted.VIEW)
        bench.replies.append(await front.ask(scripted.CONFIRM))
        front.show(replace(scripted.VIEW, stopped="the operator asked for off"))
        bench.replies.append(await front.ask(scripted.CONFIRM))
        results = (*scripted.VIEW.results, scripted.FAILED)
        front.show(replace(scripted.VIEW, stopped="the operator asked for off", results=results))
        bench.replies.append(await front.ask(scripted.CONFIRM))
        return scripted.closed()

    async def test() -> None:
        async with running(script) as (app, _, bench):
            for number, heading in enumerate(("before this", "before the stop", "before this")):
                await until(lambda: app._pending is not None and len(bench.replies) == number)  # noqa: B023
                await until(lambda: shows(app, f"{heading}: "))  # noqa: B023
                app.answered(Reply(choice="yes"))

    run(test)


def test_one_line_is_one_line() -> None:
    async def test() -> None:
        async with running(asking(scripted.PROBES, view=replace(scripted.VIEW, kept=1))) as (app, _, _bench):
            await until(lambda: shows(app, "1 line kept"))

    run(test)


def test_between_two_turns_of_the_screw_the_instruction_stays() -> None:
    gap, seen = asyncio.Event(), asyncio.Event()

    async def script(front: Front, bench: Bench) -> Closed:
        front.show(scripted.TRIM_VIEW)
        bench.replies.append(await front.ask(scripted.TRIM))
        front.show(replace(scripted.TRIM_VIEW, kept=58))
        gap.set()
        await seen.wait()
        return scripted.closed()

    async def test() -> None:
        async with running(script) as (app, pilot, bench):
            instruction = " ".join(scripted.TRIM.do.split()[:4])
            await until(lambda: app._pending is not None and shows(app, instruction))
            assert shows(app, "MORE bias: right 1/50 turn") == (scripted.TRIM_VIEW.kind == "rehearsal")
            await pilot.press("right")
            await gap.wait()
            await until(lambda: shows(app, "58 lines kept"))
            assert bench.replies == [Reply(choice="turn", turns=0.02)]
            assert shows(app, instruction)
            assert not shows(app, "One moment")
            seen.set()

    run(test)
