from __future__ import annotations

import asyncio
import datetime
from pathlib import Path
from types import SimpleNamespace
from typing import Any, cast

import pytest

from benchkit.errors import FileError, RecordError
from benchkit.events import OutputOff
from benchkit.keeper.client import KeeperClient
from benchkit.procedure.state import State
from benchkit.record.names import in_order
from benchkit.session import start
from benchkit.session.start import Runner, design_and_procedure, events_of, opened_of, replayed
from tests.procedure.driver import OPENED, begun, small
from tests.record.walks import write
from tests.stage.designs import TERN


def test_a_record_gives_its_walk_back(tmp_path: Path) -> None:
    drive = begun(small()).until("bias.soak")
    path = write(tmp_path / "a.jsonl", [event for event, _ in drive.told])
    assert [event for event, _ in events_of(path)] == [event for event, _ in drive.told]
    state = replayed(small(), path)
    assert (state.phase, state.index, state.count) == (drive.state.phase, drive.state.index, drive.state.count)
    assert state.results == drive.state.results
    assert opened_of(path) == OPENED


def test_a_finished_walk_does_not_go_on(tmp_path: Path) -> None:
    drive = begun(small())
    drive.to_end()
    path = write(tmp_path / "a.jsonl", [event for event, _ in drive.told])
    with pytest.raises(RecordError, match="finished"):
        replayed(small(), path)


def test_a_torn_record_goes_on_from_its_last_whole_line(tmp_path: Path) -> None:
    drive = begun(small()).until("power.full")
    path = write(tmp_path / "a.jsonl", [event for event, _ in drive.told])
    path.write_bytes(path.read_bytes()[:-7])
    assert replayed(small(), path).count == len(drive.told) - 1


def test_a_broken_record_does_not(tmp_path: Path) -> None:
    drive = begun(small()).until("power.full")
    path = write(tmp_path / "a.jsonl", [event for event, _ in drive.told])
    lines = path.read_bytes().splitlines(keepends=True)
    assert b"Mara" in lines[0]
    path.write_bytes(b"".join([lines[0].replace(b"Mara", b"Nara"), *lines[1:]]))
    with pytest.raises(RecordError):
        replayed(small(), path)


def test_events_out_of_place_do_not_fit(tmp_path: Path) -> None:
    drive = begun(small()).until("power.full")
    events = [event for event, _ in drive.told]
    path = write(tmp_path / "a.jsonl", [*events[:4], *events[6:]])
    with pytest.raises(RecordError, match="doesn't fit the plan"):
        replayed(small(), path)


def test_something_else_is_no_beginning(tmp_path: Path) -> None:
    drive = begun(small()).until("power.full")
    path = write(tmp_path / "a.jsonl", [drive.told[1][0]])
    with pytest.raises(RecordError, match="not the beginning"):
        opened_of(path)
    (tmp_path / "empty.jsonl").write_bytes(b"")
    with pytest.raises(RecordError):
        opened_of(tmp_path / "empty.jsonl")


NOW = datetime.datetime(2031, 4, 5, 6, 7, 8, tzinfo=datetime.UTC)


# -- two walks that reach for one name ------------------------------------------------------------------------------


def test_a_name_that_somebody_else_took_meanwhile_gets_a_further_number(tmp_path: Path) -> None:
    folder = tmp_path / "r"
    folder.mkdir()

    async def both() -> list[Path]:
        keepers = [KeeperClient.start(None, lambda push: None) for _ in range(2)]
        try:
            return list(await asyncio.gather(*(start.begin_record(keeper, folder, OPENED, NOW) for keeper in keepers)))
        finally:
            for keeper in keepers:
                await asyncio.to_thread(keeper.close)

    first, second = sorted(asyncio.run(both()), key=lambda path: in_order(path.name))
    assert second.name == first.name.replace(".jsonl", "-2.jsonl")
    assert opened_of(first) == opened_of(second) == OPENED


def test_who_gets_no_name_names_nobody_elses_record(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    others = tmp_path / "of-somebody-else.jsonl"
    others.write_bytes(b"theirs")
    asked: list[Path] = []

    def taken(*_names: object) -> Path:
        asked.append(others)
        return others

    monkeypatch.setattr(start, "free_path", taken)
    monkeypatch.setattr(start, "MOST_TRIES", 3)
    setting = SimpleNamespace(records=tmp_path)
    runner = Runner(cast("Any", setting))
    with pytest.raises(FileError, match="a file of this name already"):
        asyncio.run(runner._run(small(), State(), OPENED, cast("Any", None)))
    assert len(asked) == 3
    assert (runner.record, runner.session) == (None, None)
    assert others.read_bytes() == b"theirs"


def test_a_folder_that_takes_no_record_is_not_tried_again(tmp_path: Path) -> None:
    asked: list[Path] = []

    async def refuse(path: Path) -> None:
        asked.append(path)
        raise FileError(str(path), "", "it can't be written: No space left on device", "")

    class Full:
        def open_journal(self, path: Path, _opened: object) -> Any:
            return asyncio.run_coroutine_threadsafe(refuse(path), asyncio.get_running_loop())

    with pytest.raises(FileError, match="No space left"):
        asyncio.run(start.begin_record(cast("Any", Full()), tmp_path, OPENED, NOW))
    assert len(asked) == 1


def test_a_record_stands_alone(tmp_path: Path) -> None:
    from dataclasses import replace

    from tests.procedure.driver import SHIPPED

    opened = replace(
        OPENED, design_text=TERN.read_text(encoding="utf-8"), procedure_text=SHIPPED.read_text(encoding="utf-8")
    )
    design, procedure = design_and_procedure(opened, tmp_path / "a.jsonl")
    assert (design.name, procedure.head.name) == ("Tern 40", "First power-on")
    with pytest.raises(RecordError, match=r"a\.jsonl, line 1"):
        design_and_procedure(OPENED, tmp_path / "a.jsonl")


CONFIRMED = OutputOff(reason="end", confirmed=True, how="read back")
UNCONFIRMED = OutputOff(reason="end", confirmed=False, how="no answer")


@pytest.mark.parametrize(
    ("last_off", "manual", "state", "known"),
    [
        (CONFIRMED, False, {"ever_on": True}, True),
        (UNCONFIRMED, False, {"ever_on": True}, False),
        (UNCONFIRMED, False, {"ever_on": False}, False),
        (None, False, {"ever_on": True}, False),
        (None, False, {"ever_on": False}, True),
        (CONFIRMED, False, {"ever_on": True, "on_lamp": True}, False),
        (None, True, {"ever_on": True, "energised": "on"}, False),
        (None, True, {"ever_on": True, "energised": "off"}, True),
        (None, True, {"ever_on": False, "energised": "unknown"}, True),
        (None, None, {}, True),
        (UNCONFIRMED, None, {}, False),
    ],
)
def test_another_walk_may_begin_only_when_the_supply_is_known_to_be_off(
    last_off: OutputOff | None, manual: bool | None, state: dict[str, Any], known: bool
) -> None:
    runner = Runner(cast("Any", None))
    runner.last_off = last_off
    if manual is not None:
        parts = {"on_lamp": False, "energised": "on", **state}
        session = SimpleNamespace(
            state=SimpleNamespace(**parts), job=SimpleNamespace(manual_supply=manual), last_off=None
        )
        runner.session = cast("Any", session)
        words = runner.last_words()
        assert known == (not any(loud in words for loud in ("BY HAND", "UNKNOWN")))
    assert runner.known_off == known
