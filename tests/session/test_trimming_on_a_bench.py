"""Trims and soaks on a whole simulated bench in memory, with the stand-in's hand: slips, an open wiper, rails."""

from __future__ import annotations

import asyncio
from collections.abc import Callable
from dataclasses import replace
from functools import lru_cache
from pathlib import Path
from typing import Any

import pytest

from benchkit.events import Event, ReadingTaken, TrimEnded, Waited, WalkOpened
from benchkit.instruments.bench import parse_bench
from benchkit.procedure.actions import Question, Trim, Wait
from benchkit.procedure.questions import END, STOP, TAKE
from benchkit.procedure.targets import target_limits
from benchkit.rehearsal.bench import RehearsalBench
from benchkit.rehearsal.bench_file import bench_text
from benchkit.rehearsal.standin import StandIn
from benchkit.session import predictions, soaking, trimming
from benchkit.session.clock import SimulatedClock
from benchkit.session.front import LiveView, View
from benchkit.session.hands import Hands
from benchkit.session.job import Job
from benchkit.session.run import Session
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design, target_drop_v
from benchkit.stage.draws import seeds
from benchkit.stage.points import find_point
from tests.benchmarks.first_power_bench import ADDRESS, MemoryHands, MemoryKeeper, procedure, walk_of
from tests.rehearsal.helpers import power_up
from tests.stage.designs import breadboard

POINT = "emitter.upper.1"
QUESTION = Question(item="bias.trim", kind="trim", title="Trim", do="Turn.", choices=(TAKE, END, STOP))


@lru_cache(maxsize=1)
def design() -> Design:
    return breadboard()


class Front(StandIn):
    """The stand-in, its pictures kept; `meddle` is called with each."""

    pictures: list[LiveView]
    meddle: Callable[[LiveView], None] | None = None

    def show(self, view: View) -> None:
        super().show(view)
        if view.live is not None:
            self.pictures.append(view.live)
            if self.meddle is not None:
                self.meddle(view.live)


class Table:
    """A powered unit on the in-memory bench, and a session before it."""

    def __init__(self, share: float, seed: int = 3) -> None:
        one = design()
        self.target_v = target_drop_v(one)
        self.bench = RehearsalBench(one, seed)
        power_up(self.bench, one.rails.positive_v, 0.2, travel=share)
        self.hands = MemoryHands(self.bench)
        self.hands.probe(POINT)

    def run(self, action: Trim | Wait, front: Front) -> Event | None:
        return asyncio.run(self._run(action, front))

    async def _run(self, action: Trim | Wait, front: Front) -> Event | None:
        one, steps = design(), procedure("production-trim")
        file = parse_bench(bench_text(ADDRESS, ADDRESS.replace("::1::", "::2::")), "a bench")
        job = Job(
            design=one, procedure=steps, walk=walk_of(one, "production-trim"), record=Path("in memory"),
            setup=file.setup, accuracy=file.accuracy, supply_accuracy=file.supply_accuracy, narrow_rarely=True,
        )  # fmt: skip
        opened = WalkOpened(
            version="", walk="", kind="rehearsal", unit="1", operator="stand-in", design_name=one.name,
            design_text="", design_sha256="", procedure_name="", procedure_text="", procedure_sha256="", bench_text="",
            bench_sha256="", seed=0, supply="scpi", meter="scpi",
        )  # fmt: skip

        async def advance(seconds: float) -> None:
            self.hands.advance(seconds)

        keeper: Any = MemoryKeeper(self.hands, opened)
        clock = SimulatedClock(advance, None)
        session = Session(job, keeper, front, Hands(self.hands, own_screwdriver=True), clock)
        front.pictures = []
        if isinstance(action, Trim):
            return await asyncio.wait_for(trimming.trim(session, action), 30.0)
        return await asyncio.wait_for(soaking.wait(session, action), 30.0)

    def front(self, slips: int = 0) -> Front:
        trimmer = design().spreader.trimmer
        assert trimmer is not None
        return Front(self.hands, turns=trimmer.turns, rng=seeds("stand-in", 1), slips=slips)

    def rail_trim(self) -> Trim:
        """Make a trim by the supply's own current, which carries the feeds too."""
        trim = self.trim()
        assert trim.condition is not None
        point = find_point(design(), "rail+.current")
        limits = target_limits(design(), point, trim.condition, share=1.0)
        assert limits.low is not None
        assert limits.high is not None
        assert limits.nominal is not None
        return replace(
            trim, point=point.name, function=point.function, unit=point.unit, target=limits.nominal, low=limits.low,
            high=limits.high,
        )  # fmt: skip

    def trim(self) -> Trim:
        rails = design().rails
        cold = Condition(positive_v=rails.positive_v, negative_v=rails.negative_v, trimmer="target")
        return Trim(
            item="bias.trim", question=QUESTION, point=POINT, function="dc volts", unit="V", target=self.target_v,
            low=0.9 * self.target_v, high=1.1 * self.target_v, condition=cold,
        )  # fmt: skip


def test_a_slip_in_a_trim_is_told_taught_nothing_and_trimmed_on() -> None:
    table = Table(0.3)
    front = table.front(slips=1)
    event = table.run(table.trim(), front)
    assert isinstance(event, ReadingTaken)
    assert event.how == "by itself, at rest for 2.0 s"
    assert event.reading.value == pytest.approx(table.target_v, rel=0.055)
    gone = [live for live in front.pictures if live.mood == "gone"]
    assert gone
    assert {live.capture for live in gone} == {"probe not on the point"}
    assert all(live.advised_turns is None for live in gone)
    moods = {live.mood for live in front.pictures}
    assert not moods & {"no response", "wrong way", "running away"}


def test_a_wiper_that_opens_in_a_trim_is_no_slip() -> None:
    table = Table(0.5)
    table.hands.fault("spreader.trimmer: wiper open, after 0.5 turns")
    front = table.front()
    event = table.run(table.trim(), front)
    assert isinstance(event, TrimEnded)
    assert "wiper" in event.problem.lower()


def test_a_slip_in_a_soak_is_told_and_waited_through() -> None:
    table = Table(0.65)
    front = table.front()
    slipped: list[float] = []

    def slip(live: LiveView) -> None:
        if not slipped and len(live.trend) >= 10:
            slipped.append(live.trend[-1][0])
            table.hands.slip(7.0)

    front.meddle = slip
    soak = Wait(
        item="bias.soak", seconds=600.0, reason="Let it warm up.", point=POINT, function="dc volts", unit="V",
        target=table.target_v, low=0.5 * table.target_v, high=1.5 * table.target_v, until_settled=True, least_s=30.0,
        drift_limit=0.02 * table.target_v / 60.0,
    )  # fmt: skip
    event = table.run(soak, front)
    assert slipped
    assert isinstance(event, Waited)
    assert event.settled
    assert 30.0 <= event.seconds < 600.0
    gone = [live for live in front.pictures if live.mood == "gone"]
    assert 1 <= len(gone) <= 8
    assert all("put the probe back on the point" in live.advice for live in gone)
    assert event.final is not None
    true_v = float(table.bench.table.now().points[POINT][0])
    assert event.final == pytest.approx(true_v, rel=0.02)
    # What the lead read in the air is in no trend.
    assert all(value > 0.5 * true_v for _, value in event.trend)


@pytest.mark.parametrize("seed", [1, 2])
def test_a_trim_by_the_rails_current_arrives_though_the_feeds_hang_on_it(seed: int) -> None:
    table = Table(0.0, seed)
    front = table.front()
    trim = table.rail_trim()
    least_a = float(table.bench.table.now().points["rail+.current"][0])
    assert least_a > 0.4 * trim.target, "most of it is no quiescent current"
    event = table.run(trim, front)
    assert isinstance(event, ReadingTaken)
    assert event.reading.value is not None
    assert trim.low < event.reading.value < trim.high
    assert max(live.value or 0.0 for live in front.pictures) < trim.high
    assert not {live.mood for live in front.pictures} & {"overshot", "wrong way", "no response", "gone"}
    moves = {live.advice for live in front.pictures if live.advised_turns}
    assert len(moves) <= 8


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_the_models_line_of_the_supplys_current_holds_for_drawn_units(seed: int) -> None:
    """What advice and hands-free readings lean on."""
    table = Table(0.0, seed)
    condition = table.trim().condition
    line = predictions.rail_line(design(), POINT, condition)
    assert line is not None
    assert predictions.rail_line(design(), "rail+.current", condition) is None
    for travel in (0.0, 0.3, 0.5, 0.55, 0.6, 0.65):
        table.hands.trimmer_to(travel)
        points = table.bench.table.now().points
        drop_v, rail_a = float(points[POINT][0]), float(points["rail+.current"][0])
        room_a = max(line.per_unit * drop_v / 3.0, 0.1 * line.standing_a, 0.05 * line.per_unit * table.target_v)
        assert abs(rail_a - line.standing_a - line.per_unit * drop_v) <= room_a, (travel, drop_v, rail_a)
