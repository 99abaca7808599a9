"""The commands that compare records and tell how long channels took."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path

import pytest

from benchkit import cli
from tests.record.walks import closed, repair_events, write

Run = Callable[..., tuple[int, str, str]]


@pytest.fixture
def run(capsys: pytest.CaptureFixture[str]) -> Run:
    def call(*arguments: object) -> tuple[int, str, str]:
        with pytest.raises(SystemExit) as caught:
            cli.main([str(argument) for argument in arguments])
        out, err = capsys.readouterr()
        assert isinstance(caught.value.code, int)
        return caught.value.code, out, err

    return call


@pytest.fixture
def two(tmp_path: Path) -> tuple[Path, Path]:
    first = write(tmp_path / "a.jsonl", closed(repair_events(walk="a")))
    return first, write(tmp_path / "b.jsonl", closed(repair_events(walk="b", left_v=0.0215)), days=1)


def test_show_finds_the_last_record_of_the_unit(run: Run, two: tuple[Path, Path], tmp_path: Path) -> None:
    status, out, err = run("record", "show", two[1])
    assert (status, err) == (0, "")
    assert "Against the last record of this unit" in out
    assert "- a.jsonl: 2031-04-05T06:07:08.000000Z, Mara, PASS" in out
    empty = tmp_path / "empty"
    empty.mkdir()
    assert "There is no earlier record of it" in run("record", "show", two[1], "--records", empty)[1]
    status, out, _ = run("record", "show", two[1], "--json")
    found = json.loads(out)
    assert found["earlier"]["comparison"]["changes"][0]["point"] == "emitter.upper.1"
    assert [row["point"] for row in found["as_found_as_left"]] == ["emitter.upper.1", "output"]
    status, _, err = run("record", "show", two[1], "--records", tmp_path / "nowhere")
    assert status == 2
    assert "nowhere" in err


def test_compare(run: Run, two: tuple[Path, Path], tmp_path: Path) -> None:
    status, out, err = run("record", "compare", *two)
    assert (status, err) == (0, "")
    assert "20.05 mV  21.50 mV  +1.45 mV" in out
    assert json.loads(run("record", "compare", *two, "--json")[1])["after"]["record"]["word"] == "whole"
    lines = two[1].read_bytes().splitlines(keepends=True)
    two[1].write_bytes(b"".join([*lines[:3], *lines[4:]]))
    status, out, _ = run("record", "compare", *two)
    assert status == 2
    assert "b.jsonl is BROKEN" in out
    status, out, err = run("record", "compare", two[0], tmp_path / "none.jsonl")
    assert (status, out) == (2, "")
    assert "none.jsonl" in err


def test_times(run: Run, two: tuple[Path, Path]) -> None:
    status, out, _ = run("record", "times", *two)
    assert status == 0
    assert [line.split(",")[-2:] for line in out.splitlines()] == [
        ["seconds", "target_seconds"], ["192.0", "300.0"], ["192.0", "300.0"],
    ]  # fmt: skip
    rows = [json.loads(line) for line in run("record", "times", *two, "--json")[1].splitlines()]
    assert [row["seconds"] for row in rows] == [192.0, 192.0]


@pytest.mark.parametrize("command", ["rehearse", "walk"])
@pytest.mark.parametrize("channels", ["L,L", "", "-1", "+2", "2.5", "٣", "../../x"])
def test_channels_that_are_none_are_refused_before_anything_is_started(
    run: Run, tmp_path: Path, command: str, channels: str
) -> None:
    design = ("--design", "breadboard")
    status, out, err = run(command, *design, "--plain", "--channels", channels, "--records", tmp_path / "r")
    assert (status, out) == (2, "")
    assert f'--channels got "{channels}"' in err
    assert "a whole number from 1 to 8" in " ".join(err.split())
    assert not (tmp_path / "r").exists()


def test_the_switches_for_hands_and_bell_reach_the_walk(run: Run, monkeypatch: pytest.MonkeyPatch) -> None:
    from benchkit.ui import launch

    given: list[dict[str, object]] = []

    def take(**options: object) -> int:
        given.append(options)
        return 0

    for name in ("rehearse", "walk"):
        monkeypatch.setattr(launch, name, take)
        assert run(name)[0] == 0
        assert run(name, "--no-bell", "--no-hands-free", "--channels", "2")[0] == 0
    assert [(one["bell"], one["hands_free"], one["channels"]) for one in given] == [
        (True, True, None), (False, False, "2"), (True, True, None), (False, False, "2"),
    ]  # fmt: skip
