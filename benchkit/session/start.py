"""Puts a walk together and starts it, or goes on with one that was cut off.

`Runner` is what a front end holds on to: it exists before the session does, so that "off" always has somewhere to go.
"""

from __future__ import annotations

import asyncio
import datetime
import uuid
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Literal

from benchkit import __version__
from benchkit.errors import BenchkitError, FileError, RecordError, TakenError
from benchkit.events import Closed, Event, OutputOff, Resumed, WalkOpened, from_payload
from benchkit.journal import reader
from benchkit.keeper.client import KeeperClient
from benchkit.measure.accuracy import Accuracy
from benchkit.procedure.file import Procedure, parse_procedure
from benchkit.procedure.plan import make_plan
from benchkit.procedure.state import State
from benchkit.procedure.walk import Walk
from benchkit.record.names import free_path
from benchkit.session.clock import Clock
from benchkit.session.front import Front
from benchkit.session.hands import Hands
from benchkit.session.job import Job
from benchkit.session.run import Session
from benchkit.session.threads import in_thread
from benchkit.stage.design import Design, parse_design

MOST_TRIES = 100
"""So many names are tried for a record before it is given up: each was free when it was looked at, and then was not."""


@dataclass(kw_only=True)
class Setting:
    """All that is known before a walk begins.

    Parameters
    ----------
    kind : "walk" or "rehearsal"
    design, procedure : Design, Procedure
    setup : dict
        For the keeper; ``meter`` and ``supply`` are None where a person reads or switches.
    bench_text, bench_sha256 : str
        The bench file as it goes into the record, "" without one.
    accuracy, supply_accuracy : Accuracy
    hands : Hands
    clock : Clock
    records : Path
        The folder of records.
    seed : int
    plant : str
        The fault planted in a rehearsal, "" without one.
    units : int or None
    narrow_rarely, hands_free, bell : bool
        See `benchkit.session.job.Job`.
    channel : str
        Which channel of the unit; "" for the only one.
    cautions : tuple of str
        What has to be said about this bench, such as a calibration that is overdue.
    """

    kind: Literal["walk", "rehearsal"]
    design: Design
    procedure: Procedure
    setup: dict[str, Any]
    bench_text: str
    bench_sha256: str
    accuracy: Accuracy
    supply_accuracy: Accuracy
    hands: Hands
    clock: Clock
    records: Path
    seed: int = 0
    plant: str = ""
    units: int | None = None
    narrow_rarely: bool = False
    hands_free: bool = True
    bell: bool = True
    channel: str = ""
    cautions: tuple[str, ...] = field(default=())


class Runner:
    """Starts one walk and is the way to its session and its keeper."""

    def __init__(self, setting: Setting) -> None:
        self.setting = setting
        self.session: Session | None = None
        self.record: Path | None = None
        self.last_off: OutputOff | None = None

    def off_now(self, reason: str = "the operator asked for it") -> None:
        """Switch off at once; harmless before the session exists."""
        if self.session is not None:
            self.session.off_now(reason)

    @property
    def known_off(self) -> bool:
        """Whether what feeds the unit is confirmed off, said to be off, or was never on: only then one may go on."""
        session = self.session
        if session is None:
            return self.last_off is None or self.last_off.confirmed
        if session.state.on_lamp:
            return False
        if session.job.manual_supply:
            return session.state.energised == "off" or not session.state.ever_on
        off = self.last_off or session.last_off
        return off.confirmed if off is not None else not session.state.ever_on

    def last_words(self) -> str:
        """Say what is known of the supply at the end; "" when this walk never had anything to do with it."""
        session = self.session
        if session is None:
            return ""
        if session.state.on_lamp:
            return "The unit is on the series lamp, and nothing here switches it: SWITCH IT OFF BY HAND, pull its plug."
        if session.job.manual_supply:
            if self.known_off:
                return ""
            return "The supply is in your hands and may be on: SWITCH IT OFF BY HAND."
        off = self.last_off or session.last_off
        if off is not None and off.confirmed:
            return f"Supply off, and confirmed: {off.how}."
        if off is None and not session.state.ever_on:
            return ""
        return "OUTPUT STATE UNKNOWN: SWITCH THE SUPPLY OFF BY HAND, and treat the unit as live."

    async def begin(self, front: Front, unit: str, operator: str) -> Closed:
        """Run a new walk to its end.

        Raises
        ------
        BenchkitError
        """
        setting = self.setting
        plan = await in_thread(lambda: make_plan(setting.procedure, setting.design))
        opened = WalkOpened(
            version=__version__,
            walk=uuid.uuid4().hex,
            kind=setting.kind,
            unit=unit,
            operator=operator,
            design_name=setting.design.name,
            design_text=setting.design.text,
            design_sha256=setting.design.sha256,
            procedure_name=setting.procedure.head.name,
            procedure_text=setting.procedure.text,
            procedure_sha256=setting.procedure.sha256,
            bench_text=setting.bench_text,
            bench_sha256=setting.bench_sha256,
            seed=setting.seed,
            plant=setting.plant,
            supply="manual" if setting.setup.get("supply") is None else "scpi",
            meter="manual" if setting.setup.get("meter") is None else "scpi",
            cautions=setting.cautions,
            channel=setting.channel,
        )
        return await self._run(Walk(plan), State(), opened, front)

    async def resume(self, front: Front, path: Path, operator: str) -> Closed:
        """Go on with a walk that was cut off.

        Raises
        ------
        BenchkitError
        """
        setting = self.setting
        plan = await in_thread(lambda: make_plan(setting.procedure, setting.design))
        walk = Walk(plan)
        self.record = path
        replayed(walk, path)  # what can't go on is refused before anything is started
        return await self._run(walk, State(), Resumed(operator=operator), front)

    async def _run(self, walk: Walk, state: State, first: WalkOpened | Resumed, front: Front) -> Closed:
        setting = self.setting
        folder = setting.records if self.record is None else self.record.parent
        early: list[Any] = []
        session: Session | None = None

        def take(push: Any) -> None:
            if session is None:
                early.append(push)
            else:
                session.on_push(push)

        keeper = await in_thread(lambda: KeeperClient.start(folder / "logs", take))
        try:
            if isinstance(first, WalkOpened):
                now = datetime.datetime.now(datetime.UTC)
                record = await begin_record(keeper, setting.records, first, now)
            else:
                assert self.record is not None
                record = self.record
                head = await asyncio.wrap_future(keeper.resume_journal(record))
                first = Resumed(operator=first.operator, torn=head.torn or "")
                # Only now nobody else can write a line any more: a keeper may have been switching off until just now.
                state = replayed(walk, record)
            self.record = record
            job = Job(
                design=setting.design,
                procedure=setting.procedure,
                walk=walk,
                record=record,
                setup=setting.setup,
                accuracy=setting.accuracy,
                supply_accuracy=setting.supply_accuracy,
                units=setting.units,
                seed=setting.seed,
                narrow_rarely=setting.narrow_rarely,
                hands_free=setting.hands_free,
                bell=setting.bell,
            )
            session = Session(job, keeper, front, setting.hands, setting.clock)
            session.state = state
            session.seq = state.count
            self.session = session
            for push in early:
                session.on_push(push)
            return await session.run(first)
        finally:
            self.last_off = await in_thread(keeper.close) or (session.last_off if session is not None else None)


async def begin_record(keeper: KeeperClient, folder: Path, opened: WalkOpened, begun: datetime.datetime) -> Path:
    """Begin the record of a walk under the first name that nobody has, and return its path.

    Two walks on one unit may reach for a name in the same moment: the slower one takes a further number.

    Raises
    ------
    BenchkitError
        When it can't be written, or others were quicker `MOST_TRIES` times.
    """
    tries = 0
    while True:
        path = free_path(folder, opened.unit, begun, opened.channel)
        try:
            await asyncio.wrap_future(keeper.open_journal(path, opened))
        except TakenError:
            tries += 1
            if tries == MOST_TRIES:
                raise
        else:
            return path


def events_of(path: Path) -> list[tuple[Event, float]]:
    """Read the events of a record with their times (s).

    Raises
    ------
    RecordError
        When the record is broken before its end.
    """
    journal = reader.read(path)
    if journal.problem:
        raise RecordError(str(path), f"line {journal.problem_line}", journal.problem, "", "A broken record can't go on")
    return [(from_payload(line.event, line.payload), line.monotonic_s) for line in journal.lines]


def replayed(walk: Walk, path: Path) -> State:
    """Replay a record and return where its walk stands.

    Raises
    ------
    RecordError
        When it is finished, or doesn't fit this version's plan.
    """
    events = events_of(path)
    try:
        state, _ = walk.replay(events)
    except BenchkitError as error:
        raise RecordError(str(path), "", f"the record doesn't fit the plan: {error}") from None
    if state.closed is not None:
        raise RecordError(
            str(path), "", "this walk is finished", "one that was cut off", "Look at it with benchkit record show"
        )
    return state


def opened_of(path: Path) -> WalkOpened:
    """Return the first event of a record.

    Raises
    ------
    RecordError
    """
    events = events_of(path)
    if not events or not isinstance(events[0][0], WalkOpened):
        raise RecordError(str(path), "line 1", "this is not the beginning of a walk", "a record of benchkit")
    return events[0][0]


def design_and_procedure(opened: WalkOpened, path: Path) -> tuple[Design, Procedure]:
    """Take design and procedure out of a record.

    Raises
    ------
    FileError
    """
    try:
        return (
            parse_design(opened.design_text, f"{path.name} (design)"),
            parse_procedure(opened.procedure_text, f"{path.name} (procedure)"),
        )
    except FileError as error:
        raise RecordError(str(path), "line 1", str(error)) from None
