from __future__ import annotations

from pathlib import Path

import pytest

from benchkit.errors import RecordError
from benchkit.session.start import design_and_procedure, events_of, opened_of, replayed
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
