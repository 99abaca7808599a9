"""Keeping the computer awake, with helpers of our own in the place of the system's; clocks that don't jump."""

from __future__ import annotations

import os
import sys
import time
from pathlib import Path

import pytest

from benchkit.keeper import platform
from tests.keeper.helpers import wait_until

pytestmark = pytest.mark.skipif(sys.platform != "linux", reason="tried on Linux only")


def helper(folder: Path, monkeypatch: pytest.MonkeyPatch, script: str) -> None:
    path = folder / "systemd-inhibit"
    path.write_text(f"#!/bin/sh\n{script}\n")
    path.chmod(0o755)
    monkeypatch.setenv("PATH", f"{folder}:/bin:/usr/bin")


def test_a_system_that_agrees_is_held_until_the_end(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    helper(tmp_path, monkeypatch, f'echo "$@" > {tmp_path}/asked; echo $$ > {tmp_path}/pid; exec cat')
    awake = platform.Awake("the rails are up")
    assert awake.caution == ""
    assert (tmp_path / "asked").read_text().strip() == (
        "--what=sleep:idle:handle-lid-switch --mode=block --who=benchkit --why=the rails are up cat"
    )
    pid = int((tmp_path / "pid").read_text())
    os.kill(pid, 0)
    awake.end()
    with pytest.raises(ProcessLookupError):
        os.kill(pid, 0)
    awake.end()


def test_the_hold_ends_with_the_pipe_of_a_process_that_is_killed(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    helper(tmp_path, monkeypatch, f"cat; touch {tmp_path}/ended")
    awake = platform.Awake("x")
    assert awake._process is not None
    assert awake._process.stdin is not None
    awake._process.stdin.close()
    wait_until((tmp_path / "ended").exists)
    awake.end()


@pytest.mark.parametrize(
    ("script", "words"),
    [("exit 3", "systemd-inhibit ended with status 3"), ("echo no bus >&2; exit 1", "ended with status 1")],
)
def test_a_system_that_does_not_agree_is_told_of(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, script: str, words: str
) -> None:
    helper(tmp_path, monkeypatch, script)
    awake = platform.Awake("x")
    assert words in awake.caution
    assert "A suspended computer protects nothing" in awake.caution
    awake.end()


def test_a_system_without_the_helper(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("PATH", str(tmp_path))
    assert "systemd-inhibit is not here" in platform.Awake("x").caution


def test_the_sleep_that_is_measured_does_not_move_while_nobody_sleeps() -> None:
    before = platform.slept_s()
    time.sleep(0.1)
    assert platform.slept_s() == pytest.approx(before, abs=0.05)


def test_a_process_that_has_gone_is_no_trouble() -> None:
    pid = os.spawnlp(os.P_NOWAIT, "true", "true")
    os.waitpid(pid, 0)
    platform.end_process(pid)
