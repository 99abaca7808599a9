from __future__ import annotations

from pathlib import Path
from types import SimpleNamespace
from typing import Any, cast

import pytest

from benchkit.errors import RecordError
from benchkit.events import OutputOff
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
