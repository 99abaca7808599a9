"""Whole walks, nothing faked but the person: a real keeper, real files, and where it says so real sockets."""

from __future__ import annotations

import asyncio
import os
import re
import signal
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import pytest

from benchkit import quantities
from benchkit.events import Closed
from benchkit.measure.accuracy import BENCH_METER
from benchkit.procedure.actions import Question
from benchkit.procedure.file import load_procedure
from benchkit.record import verify
from benchkit.session.clock import SimulatedClock
from benchkit.session.front import Reply, View
from benchkit.session.hands import Hands
from benchkit.session.start import Runner, Setting
from benchkit.shipped import find_procedure
from tests.stage.designs import breadboard

BENCHKIT = [sys.executable, "-m", "benchkit"]


class ByHand:
    """A person with a meter, a hand-set supply and a healthy nominal unit, who types what they see."""

    def __init__(self) -> None:
        self.runner: Runner | None = None
        self.typed: list[str] = []
        self.views = 0

    def show(self, view: View) -> None:
        self.views += 1

    async def ask(self, question: Question, refused: str = "") -> Reply:
        assert not refused, refused
        if question.kind == "hold":
            return Reply(choice="yes", text="yes")
        if question.kind == "confirm":
            return Reply(choice="yes")
        if question.kind == "decide":
            return Reply(choice="go on", text="the handheld meter can't tell")
        if question.kind == "by hand" and question.choices[0].value in ("done", "take"):
            text = self.entry(question)
            self.typed.append(text)
            return Reply(choice=question.choices[0].value, text=text)
        return Reply(choice=question.choices[0].value)

    def entry(self, question: Question) -> str:
        assert self.runner is not None
        session = self.runner.session
        assert session is not None
        item = session.job.walk.item(session.state)
        if item.kind == "limit check":
            limit = quantities.show(item.limit_a, "A")
            return f"0.02 V {limit} -0.02 V {limit} limit"
        if item.kind == "supply":
            return f"{item.positive_v:.3f} V 5 mA {item.negative_v:.3f} V 5 mA"
        if item.kind == "off":
            return ""
        limits = session.job.walk.limits_for(session.state, item)
        assert limits is not None
        assert item.point is not None
        if limits.nominal is None:
            return "OL" if limits.high is None else "0 V"
        return quantities.show(limits.nominal, item.point.unit, 7)


def by_hand_setting(folder: Path, clock: SimulatedClock) -> Setting:
    return Setting(
        kind="walk",
        design=breadboard(),
        procedure=load_procedure(find_procedure("first-power-on")),
        setup={"meter": None, "supply": None},
        bench_text="",
        bench_sha256="",
        accuracy=BENCH_METER,
        supply_accuracy=BENCH_METER,
        hands=Hands(),
        clock=clock,
        records=folder,
        units=300,
    )


def test_a_walk_without_any_instrument_reaches_its_verdict(tmp_path: Path) -> None:
    async def nothing(seconds: float) -> None:
        await asyncio.sleep(0)

    async def run() -> tuple[Closed, ByHand, Runner]:
        front = ByHand()
        front.runner = Runner(by_hand_setting(tmp_path, SimulatedClock(nothing, None)))
        closed = await front.runner.begin(front, "A/1", "Mara")
        return closed, front, front.runner

    closed, front, runner = asyncio.run(run())
    assert runner.record is not None
    assert closed.stopped == ""
    assert closed.verdict in ("pass", "undecided")
    assert closed.exit_status == (0 if closed.verdict == "pass" else 1)
    assert len(front.typed) > 40
    found = verify.load(runner.record)
    assert found.status == 0, found.message
    text = runner.record.read_text(encoding="utf-8")
    assert "by hand" in text
    assert not re.search(r'"confirmed":true', text), "nothing that benchkit didn't switch is called confirmed"


def rehearse(folder: Path, *more: str, seed: int = 3) -> subprocess.Popen[bytes]:
    command = [*BENCHKIT, "rehearse", "--plain", "--stand-in", "--design", "breadboard", "--units", "300"]
    return subprocess.Popen(
        [*command, "--seed", str(seed), "--records", str(folder), *more],
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
    )


def finish(process: subprocess.Popen[bytes], timeout_s: float = 240) -> tuple[int, list[str]]:
    out, _ = process.communicate(timeout=timeout_s)
    return process.returncode, out.decode().splitlines()


@pytest.mark.parametrize(
    ("plant", "where"),
    [
        ("emitter.upper.1: open", "ohm.emitter.upper.1"),
        ("spreader.trimmer: wiper open", "ohm.spreader.lower"),
        ("spreader.transistor: base-emitter short", "spreader"),
    ],
)
def test_a_planted_fault_ends_before_power(tmp_path: Path, plant: str, where: str) -> None:
    status, lines = finish(rehearse(tmp_path, "--plant", plant))
    assert status in (1, 4), lines
    record = Path(lines[-1].removeprefix("record: "))
    closed = next(line for line in lines if line.startswith("The walk is closed"))
    assert where in closed
    found = verify.load(record)
    assert found.status == 0
    noted = [kept.event for kept in found.kept if kept.event.name == "noted"]
    figures: dict[str, Any] = noted[-1].figures  # type: ignore[attr-defined]
    assert figures["highest_rail_positive_v"] == pytest.approx(0.0, abs=0.1)
    assert figures["energy_j"] == pytest.approx(0.0, abs=1e-3)


def test_a_trimmer_at_the_wrong_end_is_found_before_power(tmp_path: Path) -> None:
    process = rehearse(tmp_path, "--wrong-end")
    assert process.stdout is not None
    seen = []
    for raw in process.stdout:
        seen.append(raw.decode())
        if "by resistance" in seen[-1]:
            break
    process.send_signal(signal.SIGTERM)
    status, _ = finish(process)
    assert seen[-1].startswith("fail")
    assert status == 4


@pytest.mark.skipif(not hasattr(signal, "SIGKILL"), reason="this system has no SIGKILL")
def test_a_killed_rehearsal_keeps_its_record_and_goes_on(tmp_path: Path) -> None:
    """Killed with power on: the keeper switches off within a second and says so; the walk goes on to a verdict."""
    process = rehearse(tmp_path, seed=5)
    assert process.stdout is not None
    for raw in process.stdout:
        if b"Both rails up from 0 V" in raw:
            break
    time.sleep(0.5)
    killed = time.monotonic()
    os.kill(process.pid, signal.SIGKILL)
    process.wait()
    process.stdout.close()
    (record,) = tmp_path.glob("*.jsonl")
    while time.monotonic() < killed + 3.0:
        text = record.read_text(encoding="utf-8")
        if '"event":"output off"' in text.splitlines()[-1]:
            break
        time.sleep(0.02)
    took_s = time.monotonic() - killed
    last = verify.load(record)
    assert last.status == 1, "unfinished, and whole so far"
    off = last.kept[-1].event
    assert off.name == "output off"
    assert off.confirmed  # type: ignore[attr-defined]
    assert took_s < 1.0
    command = [*BENCHKIT, "walk", "--resume", str(record), "--units", "300"]
    status, lines = finish(subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.STDOUT))
    assert status == 0, lines
    assert verify.load(record).status == 0
