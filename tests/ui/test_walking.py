"""Walks one after the other: channels, next units, statuses, and the supply that has to be off between them."""

from __future__ import annotations

import io
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from types import SimpleNamespace
from typing import Any, cast

import pytest

from benchkit.errors import InstrumentError
from benchkit.events import Closed
from benchkit.session.front import Front
from benchkit.ui import walking
from benchkit.ui.series import Turn, first_turn
from benchkit.ui.walking import NOT_OFF, Ready, by_itself, with_person
from tests.ui import scripted


class Walks:
    """Stands for benches and runners: each walk asks one question, if it is told to, and closes as it is told to."""

    def __init__(self, folder: Path, *ends: int | Exception, off: bool = True, asks: bool = False) -> None:
        self.folder = folder
        self.ends = list(ends)
        self.off = off
        self.asks = asks
        self.walked: list[tuple[str, str, str]] = []
        self.open = 0

    @contextmanager
    def prepare(self, turn: Turn) -> Iterator[Ready]:
        assert self.open == 0, "the walk before has been cleared away"
        self.open += 1
        end = self.ends.pop(0)
        record = self.folder / f"{turn.number}.jsonl"

        async def begin(front: Front, unit: str, operator: str) -> Closed:
            self.walked.append((unit, turn.channel, operator))
            record.touch()
            if self.asks:
                assert (await front.ask(scripted.CONFIRM)).choice == "yes"
            if isinstance(end, Exception):
                raise end
            return Closed(count=1, verdict="pass" if end == 0 else "fail", exit_status=end)

        def setting_of(kind: str) -> Any:
            head = SimpleNamespace(name="steps", purpose="", cautions=())
            return SimpleNamespace(
                kind=kind, design=SimpleNamespace(name="d", revision="A"), procedure=SimpleNamespace(head=head),
                cautions=(), seed=1, channel=turn.channel,
                setup={"meter": None, "supply": None}, records=self.folder,
            )  # fmt: skip

        runner = SimpleNamespace(
            begin=begin,
            session=None,
            record=record,
            known_off=self.off,
            last_words=lambda: "",
            off_now=lambda reason: None,
            setting=setting_of("walk"),
        )
        stand_in = cast("Any", SimpleNamespace)
        try:
            yield Ready(runner=cast("Any", runner), unit=turn.unit or f"u{turn.number}", stand_in=stand_in)
        finally:
            self.open -= 1


def records(printed: str) -> list[str]:
    return [Path(line.removeprefix("record: ")).name for line in printed.splitlines() if line.startswith("record: ")]


# -- the stand-in ---------------------------------------------------------------------------------------------------


def test_the_stand_in_walks_all_channels_and_prints_a_record_each(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    walks = Walks(tmp_path, 0, 1, 0)
    assert by_itself(walks.prepare, first_turn(("L", "R", "C"), "A-17")) == 1
    assert walks.walked == [("A-17", "L", "stand-in"), ("A-17", "R", "stand-in"), ("A-17", "C", "stand-in")]
    out = capsys.readouterr().out
    assert records(out) == ["0.jsonl", "1.jsonl", "2.jsonl"]
    assert out.splitlines()[-1].startswith("record: ")
    assert [line for line in out.splitlines() if line.startswith("channel: ")] == [
        "channel: L", "channel: R", "channel: C",
    ]  # fmt: skip


def test_one_channel_is_one_walk(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    walks = Walks(tmp_path, 0)
    assert by_itself(walks.prepare, first_turn((), "")) == 0
    assert walks.walked == [("u0", "", "stand-in")]
    assert "channel: " not in capsys.readouterr().out


def test_no_channel_begins_while_the_supply_may_be_on(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    walks = Walks(tmp_path, 4, 0, off=False)
    assert by_itself(walks.prepare, first_turn(("L", "R"), "")) == 4
    assert len(walks.walked) == 1
    assert NOT_OFF in capsys.readouterr().err


def test_instrument_trouble_ends_the_series(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    walks = Walks(tmp_path, 1, InstrumentError("timeout", "No answer"), 0)
    assert by_itself(walks.prepare, first_turn(("L", "R", "C"), "")) == 3
    assert len(walks.walked) == 2
    assert walks.open == 0
    assert "No answer" in capsys.readouterr().err


# -- a person, in lines ---------------------------------------------------------------------------------------------


def typed(monkeypatch: pytest.MonkeyPatch, *lines: str) -> None:
    monkeypatch.setattr("sys.stdin", io.StringIO("".join(f"{line}\n" for line in lines)))


def test_a_pipe_can_hold_the_answers_of_several_channels_and_units(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    walks = Walks(tmp_path, 0, 1, 0, asks=True)
    typed(monkeypatch, "y", "n", "y", "N", "", "A-18", "y", "q")
    assert with_person(walks.prepare, first_turn(("L", "R"), "A-17"), "Mara", plain=True, bell=False) == 1
    assert walks.walked == [("A-17", "L", "Mara"), ("A-17", "R", "Mara"), ("A-18", "L", "Mara")]
    out = capsys.readouterr().out
    assert records(out) == ["0.jsonl", "1.jsonl", "2.jsonl"]
    assert "next channel: R (N)" in out
    assert "next unit (N)" in out
    assert "Unit A-18, channel L" in out
    assert "was left before its end" not in out


def test_a_pipe_that_ends_after_a_channel_ends_the_series(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    walks = Walks(tmp_path, 0, asks=True)
    typed(monkeypatch, "y")
    monkeypatch.setattr("benchkit.ui.plain.END_S", 0.0)
    assert with_person(walks.prepare, first_turn(("L", "R"), "A-17"), "Mara", plain=True, bell=False) == 0
    assert "was left before its end" not in capsys.readouterr().out


def test_a_pipe_without_channels_is_not_asked_what_comes_next(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    walks = Walks(tmp_path, 0, asks=True)
    typed(monkeypatch, "y", "n")
    assert with_person(walks.prepare, first_turn((), "A-17"), "Mara", plain=True, bell=False) == 0
    assert "next unit" not in capsys.readouterr().out


@pytest.mark.parametrize(("off", "end", "status"), [(False, 0, 0), (True, InstrumentError("timeout", "No answer"), 3)])
def test_in_lines_too_nothing_follows_what_is_not_off_or_failed(
    off: bool,
    end: int | Exception,
    status: int,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    walks = Walks(tmp_path, end, 0, off=off)
    typed(monkeypatch, "n", "y")
    assert with_person(walks.prepare, first_turn(("L", "R"), "A-17"), "Mara", plain=True, bell=False) == status
    assert len(walks.walked) == 1
    assert (NOT_OFF in capsys.readouterr().err) == (not off)


# -- a person, on screens -------------------------------------------------------------------------------------------


def test_on_screens_a_channel_begins_at_once_and_a_unit_asks_for_its_number(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    walks = Walks(tmp_path, 0, 1, 0)
    shown: list[Any] = []

    def run_app(start: Any, **more: Any) -> int:
        import asyncio

        from benchkit.ui.entry import Identity

        shown.append(more)
        opening = more["opening"]
        typed_number = "A-17" if not shown[1:] else "A-18"
        who = more["identity"] or Identity(unit=typed_number, operator=opening.operator or "Mara")
        closed: Closed = asyncio.run(start(None, who))
        if len(shown) < 3:
            more["on_next"]()
        return closed.exit_status

    monkeypatch.setattr("benchkit.ui.running.run_app", run_app)
    turn = first_turn(("L", "R"), "")
    assert walking._on_screens(walks.prepare, turn, "Mara", bell=False) == 1
    assert walks.walked == [("A-17", "L", "Mara"), ("A-17", "R", "Mara"), ("A-18", "L", "Mara")]
    assert [more["identity"] is None for more in shown] == [True, False, True]
    assert [more["opening"].another_unit for more in shown] == [False, False, True]
    assert [more["opening"].next_label for more in shown] == ["next channel: R", "next unit", "next channel: R"]
    assert {more["bell"] for more in shown} == {False}
