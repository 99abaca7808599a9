"""After a walk: one key goes on with the next channel or unit, and the end tells what changed."""

from __future__ import annotations

import asyncio
from dataclasses import replace
from pathlib import Path

import pytest

from benchkit.ui.app import BenchApp
from benchkit.ui.entry import Identity, Opening
from benchkit.ui.screens.start import StartScreen
from tests.record.walks import closed, repair_events, write
from tests.ui import scripted
from tests.ui.scripted import WHO, Bench
from tests.ui.test_app import shows, until


def app_with(opening: Opening, bench: Bench, *, identity: Identity | None = WHO, record: str = "none") -> BenchApp:
    async def start(front: object, who: Identity) -> object:
        bench.front, bench.identity = front, who  # type: ignore[assignment]
        front.show(replace(scripted.END_VIEW, record=record))  # type: ignore[attr-defined]
        return scripted.closed(1, "fail")

    return BenchApp(
        start,  # type: ignore[arg-type]
        off_now=bench.off_now,
        heartbeat=bench.beat,
        opening=opening,
        identity=identity,
        guard_s=0.0,
    )


@pytest.mark.parametrize(
    ("label", "key", "goes_on"),
    [
        ("next channel: R", "n", True),
        ("next unit", "enter", False),
    ],
)
def test_one_key_goes_on(label: str, key: str, goes_on: bool) -> None:
    async def test() -> None:
        bench = Bench()
        app = app_with(replace(scripted.OPENING, next_label=label), bench)
        async with app.run_test(size=(80, 24)) as pilot:
            await until(lambda: shows(app, "leave benchkit"))
            assert shows(app, label)
            await pilot.press(key)
            await until(lambda: app.return_value is not None)
        assert app.goes_on == goes_on
        assert app.exit_status() == 1
        assert bench.offs == []

    asyncio.run(test())


def test_the_next_unit_asks_for_nothing_but_its_serial_number() -> None:
    async def test() -> None:
        bench = Bench()
        opening = replace(scripted.OPENING, operator="R. Holm", channel="L", another_unit=True)
        app = app_with(opening, bench, identity=None)
        async with app.run_test(size=(80, 24)) as pilot:
            await pilot.pause()
            assert isinstance(app.screen, StartScreen)
            assert shows(app, "type or scan its number")
            assert shows(app, "channel L")
            await pilot.press(*"A18", "enter")
            await until(lambda: bench.identity is not None)
        assert bench.identity == Identity(unit="A18", operator="R. Holm")

    asyncio.run(test())


def test_the_end_tells_the_time_and_what_changed(tmp_path: Path) -> None:
    async def test() -> None:
        bench = Bench()
        record = write(tmp_path / "r.jsonl", closed(repair_events()))
        app = app_with(scripted.OPENING, bench, record=str(record))
        async with app.run_test(size=(120, 40)):
            await until(lambda: shows(app, "This channel took 3 min 12 s, target 5 min 0 s."))
            assert shows(app, "As found, as left:")
            assert shows(app, "emitter.upper.1 found 31.20 mV, left 20.05 mV (-36 %)")

    asyncio.run(test())
