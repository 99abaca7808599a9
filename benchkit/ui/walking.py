"""Runs walks one after the other before a person or a stand-in, and says at every way out what is known.

Rules
-----
* One walk has one process that keeps the record and the instruments; it has ended, and the supply is confirmed or said
  to be off, before the next walk begins.  Where that isn't so, no next walk begins.
* The exit status of several walks is the highest of theirs.
* The last line printed of each walk names its record; with a stand-in it is ``record: PATH``.
"""

from __future__ import annotations

import asyncio
import getpass
import os
import shlex
import signal
import sys
from collections.abc import Awaitable, Callable
from contextlib import AbstractContextManager, ExitStack, suppress
from dataclasses import dataclass
from functools import partial
from pathlib import Path
from typing import Any

import click

from benchkit.errors import BenchkitError
from benchkit.events import Closed
from benchkit.procedure.actions import Choice, Question
from benchkit.session.front import Front
from benchkit.session.start import Runner
from benchkit.ui.series import NEXT, Turn, end_question

STAND_IN = "stand-in"
"""The operator of a walk that nobody is asked in."""

NOT_OFF = "No next walk begins before the supply is known to be off."

_SERIAL = Question(
    item="", kind="text", title="Serial number of the next unit", do="Type or scan it.",
    choices=(Choice(value="done", label="begin"),),
)  # fmt: skip


@dataclass(frozen=True, kw_only=True)
class Ready:
    """One walk that can begin.

    Parameters
    ----------
    runner : Runner
    unit : str
        Serial number, or what is offered as one; "" where it has to be typed.
    resume : Path or None
        The record that is gone on with.
    stand_in : callable or None
        Makes the simulated technician.
    """

    runner: Runner
    unit: str
    resume: Path | None = None
    stand_in: Callable[[], Front] | None = None

    async def walk(self, front: Front, unit: str, operator: str) -> Closed:
        """Walk, or go on with the walk that was cut off."""
        if self.resume is not None:
            return await self.runner.resume(front, self.resume, operator)
        return await self.runner.begin(front, unit, operator)


Prepare = Callable[[Turn], AbstractContextManager[Ready]]
"""Gets everything ready for one walk, and clears it away afterwards."""


# -- nobody is asked ------------------------------------------------------------------------------------------------


def by_itself(prepare: Prepare, turn: Turn) -> int:
    """Let the stand-in walk through the channels of one unit; return the exit status of all."""
    worst = 0
    while True:
        with prepare(turn) as ready:
            if turn.channel:
                click.echo(f"channel: {turn.channel}")
            status, closed = _finish(ready.runner, partial(_stand_in_walk, ready))
        worst = max(worst, status)
        if not turn.left or not closed:
            return worst
        if not ready.runner.known_off:
            click.echo(NOT_OFF, err=True)
            return worst
        turn = turn.after(ready.unit)


async def _stand_in_walk(ready: Ready) -> Closed:
    assert ready.stand_in is not None
    _stop_on_signals(asyncio.get_running_loop(), ready.runner)
    return await ready.walk(ready.stand_in(), ready.unit, STAND_IN)


# -- a person -------------------------------------------------------------------------------------------------------


def with_person(prepare: Prepare, turn: Turn, operator: str, *, plain: bool, bell: bool) -> int:
    """Walk, channel after channel and unit after unit, until the person leaves; return the exit status of all."""
    if plain or not (sys.stdin.isatty() and sys.stdout.isatty()):
        return _in_lines(prepare, turn, operator, bell=bell)
    return _on_screens(prepare, turn, operator, bell=bell)


def _on_screens(prepare: Prepare, turn: Turn, operator: str, *, bell: bool) -> int:
    from benchkit.ui.entry import Identity

    worst, who = 0, Identity(unit="", operator=operator or login())
    while True:
        with prepare(turn) as ready:
            status, who, goes_on = _on_screen(ready, turn, who, bell=bell)
        worst = max(worst, status)
        if not goes_on:
            return worst
        if not ready.runner.known_off:
            click.echo(NOT_OFF, err=True)
            return worst
        turn = turn.after(who.unit)
        click.echo(f"Getting ready for {f'channel {turn.channel}' if turn.channel else 'the next unit'}.")


def _on_screen(ready: Ready, turn: Turn, who: Any, *, bell: bool) -> tuple[int, Any, bool]:
    """Show one walk; return its exit status, who walked, and whether the person goes on with the next one."""
    from benchkit.ui.entry import Identity, Opening
    from benchkit.ui.running import run_app

    setting, runner = ready.runner.setting, ready.runner
    took: list[Identity] = []
    going_on: list[bool] = []

    async def start(front: Front, identity: Identity) -> Closed:
        took.append(identity)
        return await ready.walk(front, identity.unit, identity.operator)

    def beat() -> None:
        """Heartbeats are sent by the session, on this very loop, from the moment that there is something to mind."""

    unit = turn.unit or ready.unit
    another_channel = turn.number > 0 and not turn.another_unit
    opening = Opening(
        kind=setting.kind,
        design=f"{setting.design.name} {setting.design.revision}",
        procedure=setting.procedure.head.name,
        purpose=setting.procedure.head.purpose,
        meter=_named(setting.setup.get("meter")),
        supply=_named(setting.setup.get("supply")),
        record=str(ready.resume or setting.records),
        unit=unit,
        operator=who.operator,
        resumed=ready.resume is not None,
        channel=turn.channel,
        another_unit=turn.another_unit,
        next_label=turn.next_label,
    )
    status = run_app(
        start,
        off_now=runner.off_now,
        heartbeat=beat,
        opening=opening,
        identity=Identity(unit=unit, operator=who.operator) if another_channel else None,
        log_dir=setting.records / "logs",
        bell=bell,
        on_next=lambda: going_on.append(True),
    )
    _say_end(runner)
    return status, took[-1] if took else who, bool(going_on)


def _named(table: Any) -> str:
    return "by hand" if table is None else str(table.get("address", "by hand"))


@dataclass
class _Held:
    """The walk that lines are about just now, and the worst status so far."""

    ready: Ready
    worst: int = 0
    ended: bool = False

    def off_now(self, reason: str) -> None:
        self.ready.runner.off_now(reason)


def _in_lines(prepare: Prepare, turn: Turn, operator: str, *, bell: bool) -> int:
    with ExitStack() as stack:
        held = _Held(stack.enter_context(prepare(turn)))
        _greet(held.ready.runner)
        unit = turn.unit or held.ready.unit
        while not unit.strip():
            unit = click.prompt("Serial number of the unit")
        while not operator.strip():
            operator = click.prompt("Operator", default=login() or None)
        try:
            asyncio.run(_line_by_line(stack, prepare, turn, held, (unit, operator), bell=bell))
        except (click.Abort, KeyboardInterrupt):
            if not held.ended:
                click.echo("The walk was left before its end.")
                _say_end(held.ready.runner)
                return max(4, held.worst)
        return held.worst


async def _line_by_line(
    stack: ExitStack, prepare: Prepare, turn: Turn, held: _Held, who: tuple[str, str], *, bell: bool
) -> None:
    """Walk in lines of text until nothing comes after or nobody wants it."""
    from benchkit.ui.plain import PlainFront

    unit, operator = who
    front = PlainFront(held.off_now, bell=bell)
    while True:
        ready, held.ended = held.ready, False
        _stop_on_signals(asyncio.get_running_loop(), ready.runner)
        try:
            closed = await ready.walk(front, unit, operator)
        except BenchkitError as error:
            held.ended = True
            held.worst = max(held.worst, _failed(ready.runner, error))
            return
        held.ended = True
        held.worst = max(held.worst, _closed(ready.runner, closed))
        # Nobody is asked where there is no telling that somebody is there: a pipe without channels ends as it began.
        if not turn.next_label or not (turn.channels or sys.stdin.isatty()):
            return
        front.anew()
        if (await front.ask(end_question(turn.next_label))).choice != NEXT:
            return
        if not ready.runner.known_off:
            click.echo(NOT_OFF, err=True)
            return
        turn = turn.after(unit)
        if turn.another_unit:
            unit = await _next_serial(front)
        stack.close()
        held.ready = stack.enter_context(prepare(turn))
        if turn.channel:
            click.echo(f"Unit {unit}, channel {turn.channel}")


async def _next_serial(front: Front) -> str:
    from benchkit.ui.entry import entry_problem

    refused = ""
    while True:
        text = (await front.ask(_SERIAL, refused)).text.strip()
        refused = entry_problem("serial number", text)
        if not refused:
            return text


def _greet(runner: Runner) -> None:
    from benchkit.record.show import DEFERENCE

    setting = runner.setting
    click.echo(f"benchkit: {setting.procedure.head.name}, {setting.design.name} {setting.design.revision}")
    click.echo(DEFERENCE)
    for caution in (*setting.procedure.head.cautions, *setting.cautions):
        click.echo(f"CAUTION: {caution}")
    if setting.kind == "rehearsal":
        click.echo(f"This is a rehearsal: no real unit is touched. Seed {setting.seed}.")
    if setting.channel:
        click.echo(f"Channel {setting.channel}")


def login() -> str:
    """Return the name under which somebody is logged in; "" where there is none."""
    try:
        return getpass.getuser()
    except (OSError, KeyError):
        return ""


# -- ways out -------------------------------------------------------------------------------------------------------


def _finish(runner: Runner, run: Callable[[], Awaitable[Closed]]) -> tuple[int, bool]:
    """Run one walk in a loop of its own; return its exit status, and whether it came to its end."""

    async def whole() -> Closed:
        return await run()

    try:
        return _closed(runner, asyncio.run(whole())), True
    except BenchkitError as error:
        return _failed(runner, error), False
    except (click.Abort, KeyboardInterrupt):
        click.echo("The walk was left before its end.")
        _say_end(runner)
        return 4, False


def _failed(runner: Runner, error: BenchkitError) -> int:
    click.echo(f"benchkit: {error}", err=True)
    _say_end(runner)
    return error.exit_status


def _closed(runner: Runner, closed: Closed) -> int:
    from benchkit.record.at_the_end import end_lines

    words = f"The walk is closed: {closed.verdict.upper()}."
    if closed.stopped:
        words += f" It was stopped: {closed.stopped.rstrip('.')}."
    click.echo(words)
    for line in end_lines(runner.record) if runner.record is not None else ():
        click.echo(line)
    _say_end(runner)
    return closed.exit_status


def _say_end(runner: Runner) -> None:
    """Last lines of every way out: what is known of the supply, and where the record is."""
    words = runner.last_words()
    if words:
        click.echo(words)
    if runner.record is not None and runner.record.exists():
        click.echo(f"record: {runner.record}")
        if runner.session is not None and runner.session.state.closed is None:
            click.echo(f"Go on with: {resume_command(runner.setting.kind, runner.record)}")


def resume_command(kind: str, record: Path) -> str:
    """Return the command with which a walk that has not come to its end is gone on with.

    Examples
    --------
    >>> resume_command("rehearsal", Path("records/my unit.jsonl"))
    "benchkit rehearse --resume 'records/my unit.jsonl'"
    """
    words = ("benchkit", "rehearse" if kind == "rehearsal" else "walk", "--resume", str(record))
    return " ".join(words) if os.name != "posix" else shlex.join(words)


def _stop_on_signals(loop: asyncio.AbstractEventLoop, runner: Runner) -> None:
    """Ctrl+C and a polite end of the process mean: off, made safe, closed.  A second time means at once.

    While the supply is known to be off they mean leaving: the walk keeps its place.
    """
    told = False

    def stop(number: int, _frame: object) -> None:
        nonlocal told
        if told or runner.session is None or runner.session.nothing_to_switch_off:
            raise KeyboardInterrupt  # with the supply off there is nothing to stop: the walk can be gone on with later
        told = True
        loop.call_soon_threadsafe(runner.off_now, f"the operator pressed stop (signal {number})")

    for name in ("SIGINT", "SIGTERM", "SIGHUP"):
        number = getattr(signal, name, None)
        if number is not None:
            with suppress(ValueError):
                signal.signal(number, stop)
