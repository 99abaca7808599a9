"""The trim, the soak and the placing of probes on the screen, against scripted pictures."""

from __future__ import annotations

import asyncio
import contextlib
from collections.abc import AsyncIterator
from dataclasses import replace
from typing import Any

import pytest
from textual.geometry import Region
from textual.pilot import Pilot

from benchkit.events import Closed
from benchkit.session.front import Front, Reply
from benchkit.ui import look
from benchkit.ui.app import BenchApp
from benchkit.ui.screens.walk import channel_time
from benchkit.ui.widgets.digits import BigReading, changed_columns
from benchkit.ui.widgets.trend import Trend
from benchkit.ui.widgets.trim_words import MOOD_LOOKS, TURN_KEYS
from tests.ui import live_views, scripted
from tests.ui.live_views import LIVES, PROBING, SCENES, SOAK_VIEW, TRIM_VIEW, trimming
from tests.ui.scripted import WHO, Bench, Script, app_for, asking
from tests.ui.test_app import drawn, run, shows, until


@contextlib.asynccontextmanager
async def running(
    script: Script, *, size: tuple[int, int] = (80, 24), bell: bool = True, guard_s: float = 0.0
) -> AsyncIterator[tuple[BenchApp, Pilot[int], Bench, list[int]]]:
    """The app with its bell counted."""
    bench, bells = Bench(), [0]
    app = app_for(script, bench, identity=WHO, guard_s=guard_s, bell=bell)

    def ring() -> None:
        bells[0] += 1

    app.bell = ring  # type: ignore[method-assign]
    async with app.run_test(size=size) as pilot:
        await until(lambda: bench.front is not None)
        await pilot.pause()
        yield app, pilot, bench, bells


@pytest.mark.parametrize("size", [(80, 24), (120, 40), (40, 12)])
def test_each_scene_says_what_is_going_on(size: tuple[int, int]) -> None:
    few = ("turn", "gone", "soak", "probes")
    scenes = {name: scene for name, scene in SCENES.items() if size == (80, 24) or name in few}

    async def script(front: Front, bench: Bench) -> Closed:
        for question, view in scenes.values():
            front.show(view)
            if question is None:
                bench.off_asked.clear()
                await bench.off_asked.wait()
            else:
                bench.replies.append(await front.ask(question))
        return scripted.closed()

    async def test() -> None:
        async with running(script, size=size) as (app, _, bench, _bells):
            for name, (question, view) in scenes.items():
                live = view.live
                assert live is not None
                await until(lambda: (app._view is view) and (app._pending is not None) == (question is not None))  # noqa: B023
                words = {"soak": "1 min 40 s left", "probes": "at rest 1.2 s of"}.get(name, live.advice[:20])
                await until(lambda: shows(app, words))  # noqa: B023
                rows = drawn(app)
                assert {c for row in rows for c in row if not c.isascii()} <= look.SAFE
                assert "SUPPLY ON" in " ".join(rows[-3:])
                told = {"soak": ["63 %"], "probes": ["next probes: emitter.lower.1"]}.get(name, [])
                if name in LIVES:
                    told += ["target 20.00 mV, from 18.00 to 22.00", "Enter or space take this reading"]
                    if size[0] > 40 or MOOD_LOOKS[live.mood].tone == "alarm":
                        told.append("TOO LOW" if name == "turn" else MOOD_LOOKS[live.mood].word)
                    if size[0] > 40:
                        told += [live.rate_text, live.settles_text, live.capture, "now", "channel L", "2:12 of 5:00"]
                with contextlib.suppress(AssertionError):  # a picture is painted piece by piece
                    await until(lambda: all(shows(app, words) for words in told))  # noqa: B023
                assert [words for words in told if not shows(app, words)] == [], name
                if question is None:
                    bench.off_asked.set()
                else:
                    app.answered(Reply(choice="done"))

    run(test)


def test_the_soak_page_comes_and_goes_by_itself() -> None:
    async def script(front: Front, bench: Bench) -> Closed:
        front.show(SOAK_VIEW)
        await bench.off_asked.wait()
        front.show(replace(SOAK_VIEW, live=SOAK_VIEW.live, busy="", busy_share=None, remaining_s=None))
        bench.replies.append(await front.ask(scripted.CONFIRM))
        return scripted.closed()

    async def test() -> None:
        async with running(script) as (app, pilot, bench, _):
            await until(lambda: shows(app, "1 min 40 s left"))
            await pilot.press("space", "enter")
            assert bench.offs == []
            await pilot.press("f9")
            await until(lambda: shows(app, "protective earth"))
            assert not shows(app, "1 min 40 s left")
            await pilot.press("y")
            await until(lambda: bench.replies == [Reply(choice="yes")])

    run(test)


@pytest.mark.parametrize(
    ("question", "view", "choice"),
    [(scripted.TRIM, replace(TRIM_VIEW, live=LIVES["steady"]), "take"), (scripted.PROBES, PROBING, "done")],
)
def test_the_space_bar_and_so_a_foot_switch_takes_the_reading(question: Any, view: Any, choice: str) -> None:
    async def test() -> None:
        async with running(asking(question, view=view)) as (app, pilot, bench, _):
            await until(lambda: app._pending is not None and shows(app, "Enter or space"))
            await pilot.press("space")
            await until(lambda: bench.replies == [Reply(choice=choice)])
            assert bench.offs == []

    run(test)


def test_the_bell_rings_once_for_each_value_taken_by_itself() -> None:
    async def test() -> None:
        async with running(asking(scripted.PROBES, view=PROBING)) as (app, _pilot, bench, bells):
            assert bench.front is not None
            assert PROBING.live is not None
            bells[0] = 0
            for captured in (1, 1, 2, 2):
                bench.front.show(replace(PROBING, live=replace(PROBING.live, captured=captured)))
                bench.front.show(replace(PROBING, live=None))  # pictures that come faster than they are painted
            assert bells == [2]
            bench.front.show(replace(PROBING, live=replace(PROBING.live, captured=0)))
            bench.front.show(replace(PROBING, live=replace(PROBING.live, captured=1)))
            assert bells == [3], "the next channel counts anew"
            app._painter._bell = False
            bench.front.show(replace(PROBING, live=replace(PROBING.live, captured=2)))
            assert bells == [3], "nobody wants to hear it"

    run(test)


def test_a_foot_that_comes_down_just_after_takes_nothing() -> None:
    async def test() -> None:
        async with running(asking(scripted.PROBES, view=PROBING), guard_s=10.0) as (app, pilot, bench, _):
            assert bench.front is not None
            assert PROBING.live is not None
            answer = app.screen.page.answer  # type: ignore[attr-defined]
            answer._guard_s = 0.0
            bench.front.show(replace(PROBING, live=replace(PROBING.live, captured=1)))
            await pilot.press("space")
            await until(lambda: shows(app, "Not taken"))
            assert bench.replies == []
            answer.hold(0.0)
            await pilot.press("space")
            await until(lambda: bench.replies == [Reply(choice="done")])

    run(test)


def test_only_what_changed_is_painted_again() -> None:
    async def test() -> None:
        async with running(asking(scripted.TRIM, view=replace(TRIM_VIEW, live=LIVES["inside"]))) as (
            app,
            pilot,
            bench,
            _,
        ):
            assert bench.front is not None
            await pilot.pause(0.3)
            painted: list[tuple[str, tuple[Region, ...]]] = []
            for kind in (BigReading, Trend):
                for widget in app.screen.query(kind):
                    usual = widget.refresh

                    def refresh(*regions: Region, name: str = kind.__name__, usual: Any = usual, **more: Any) -> Any:
                        painted.append((name, regions))
                        return usual(*regions, **more)

                    widget.refresh = refresh  # type: ignore[method-assign]
            live = LIVES["inside"]
            bench.front.show(replace(TRIM_VIEW, live=replace(live)))
            await pilot.pause(0.3)
            assert painted == [], "the same again costs nothing"
            assert live.value is not None
            bench.front.show(replace(TRIM_VIEW, live=replace(live, value=live.value + 1e-5)))
            await until(lambda: bool(painted))
            (name, regions) = painted[0]
            assert name == "BigReading"
            assert [region.width < 15 for region in regions] == [True], "one figure"

    run(test)


def test_figures_keep_their_place() -> None:
    async def test() -> None:
        view = replace(TRIM_VIEW, live=trimming(value=9.87e-3, inside=False))
        async with running(asking(scripted.TRIM, view=view)) as (app, pilot, bench, _):
            assert bench.front is not None
            live, ends = LIVES["turn"], set[int]()
            for value in (9.99e-3, 10.01e-3, -1.5e-3, 21.11e-3):
                bench.front.show(replace(view, live=replace(live, value=value)))
                await pilot.pause(0.25)
                (row,) = [row for row in drawn(app) if " mV " in row and "█" in row]
                ends.add(row.index(" mV "))
            assert len(ends) == 1

    run(test)


def test_keys_that_turn_while_a_turn_is_carried_out_are_kept_and_said() -> None:
    async def test() -> None:
        go_on = asyncio.Event()

        async def script(front: Front, bench: Bench) -> Closed:
            front.show(scripted.TRIM_VIEW)
            bench.replies.append(await front.ask(scripted.TRIM))
            await go_on.wait()
            for question in (scripted.TRIM, scripted.TRIM, scripted.CONFIRM, scripted.TRIM):
                bench.replies.append(await front.ask(question))
            return scripted.closed()

        async with running(script) as (app, pilot, bench, _):
            await pilot.press("pageup", "pageup")
            await until(lambda: len(bench.replies) == 1)
            await pilot.pause(0.2)  # nobody has the keys now
            await pilot.press("pageup", "down")
            await until(lambda: shows(app, "Still turning: 1.75 turns for MORE bias to come."))
            go_on.set()
            await until(lambda: len(bench.replies) == 2)
            assert [reply.turns for reply in bench.replies] == [1.0, 1.75]
            await until(lambda: shows(app, TURN_KEYS))
            app.walk.page.take_key("pageup")  # type: ignore[union-attr]
            app.walk.page.take_key("pageup")  # type: ignore[union-attr]
            await until(lambda: len(bench.replies) == 3)
            await until(lambda: app.walk is not None and app.walk.page.id == "step")
            await pilot.press("y")
            await until(lambda: len(bench.replies) == 4)
            await pilot.pause(0.3)
            assert len(bench.replies) == 4, "what was still to be turned belonged to the trim before"

    run(test)


@pytest.mark.parametrize(
    ("elapsed_s", "target_s", "words"),
    [(None, 300.0, ""), (0.0, None, "0:00  "), (59.9, 300.0, "1:00 of 5:00  "), (3723.0, 60.0, "62:03 of 1:00  ")],
)
def test_the_time_of_a_channel(elapsed_s: float | None, target_s: float | None, words: str) -> None:
    assert channel_time(elapsed_s, target_s) == words


def test_columns_that_changed() -> None:
    assert changed_columns(["ab", "cd"], ["ab", "cd"]) is None
    assert changed_columns(["ab", "cd"], ["xb", "cy"]) == (0, 1)
    assert changed_columns(["ab"], ["abc"]) == (2, 2)


def test_every_mood_is_among_the_scenes() -> None:
    assert set(live_views.LIVES) == set(MOOD_LOOKS)
