"""Puts bench, session and front end together for the commands ``rehearse`` and ``walk``."""

from __future__ import annotations

import asyncio
import getpass
import os
import secrets
import shlex
import signal
import sys
from collections.abc import Awaitable, Callable
from contextlib import suppress
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from benchkit import shipped
from benchkit.errors import BenchkitError, EntryError
from benchkit.events import Closed
from benchkit.session.clock import SimulatedClock, WallClock
from benchkit.session.front import Front
from benchkit.session.hands import Hands
from benchkit.session.start import Runner, Setting, design_and_procedure, opened_of

if TYPE_CHECKING:
    from benchkit.rehearsal.bench_client import BenchProcess
    from benchkit.stage.design import Design

PACE = 30.0
"""While a person waits in a rehearsal, so many simulated seconds pass in one."""


def rehearse(
    *,
    design: str,
    procedure: str,
    records: Path,
    plain: bool,
    stand_in: bool,
    seed: int | None,
    plant: str,
    wrong_end: bool,
    units: int | None,
    unit: str,
    operator: str,
    resume_path: Path | None,
) -> int:
    """Rehearse; returns the exit status."""
    from benchkit.procedure.file import load_procedure
    from benchkit.rehearsal.bench_client import start_bench
    from benchkit.stage.design import load_design
    from benchkit.stage.faults import parse_fault

    if resume_path is not None:
        opened = opened_of(resume_path)
        if opened.kind != "rehearsal":
            raise EntryError(
                f"{resume_path} is the record of a real walk", "a rehearsal", "Go on with benchkit walk --resume"
            )
        loaded, steps = design_and_procedure(opened, resume_path)
        seed, plant, unit = opened.seed, opened.plant, opened.unit
        operator = operator or opened.operator
    else:
        loaded = load_design(shipped.find_design(design))
        steps = load_procedure(shipped.find_procedure(procedure))
        seed = secrets.randbelow(2**31) if seed is None else seed
    if plant:
        parse_fault(plant, loaded)
    bench = start_bench(loaded.text, seed=seed, plant=plant, clock="manual" if stand_in else "follow")
    try:
        hands = Hands(bench.hands, own_screwdriver=stand_in)
        clock = SimulatedClock(hands.advance, None if stand_in else PACE)
        setting = Setting(
            kind="rehearsal",
            design=loaded,
            procedure=steps,
            hands=hands,
            clock=clock,
            records=records,
            seed=seed,
            plant=plant,
            units=units,
            narrow_rarely=stand_in,
            **_bench_parts(bench.bench_text, "the rehearsal's bench"),
        )
        runner = Runner(setting)
        unit = unit or f"rehearsal-{seed}"
        if stand_in:
            return _with_stand_in(runner, bench, loaded, seed, unit, wrong_end=wrong_end, resume=resume_path)
        return _with_person(runner, unit, operator or _login(), plain=plain, resume=resume_path)
    finally:
        bench.stop()


def walk(
    *,
    design: str,
    procedure: str,
    records: Path,
    bench_path: Path | None,
    plain: bool,
    seed: int | None,
    units: int | None,
    unit: str,
    operator: str,
    resume_path: Path | None,
    visa: str = "",
) -> int:
    """Walk on a real unit, or go on with one; returns the exit status."""
    from benchkit.procedure.file import load_procedure
    from benchkit.stage.design import load_design

    if resume_path is not None:
        opened = opened_of(resume_path)
        if opened.kind == "rehearsal":
            return rehearse(
                design=design, procedure=procedure, records=records, plain=plain, stand_in=opened.operator == STAND_IN,
                seed=None, plant="", wrong_end=False, units=units, unit="", operator=operator, resume_path=resume_path,
            )  # fmt: skip
        loaded, steps = design_and_procedure(opened, resume_path)
        seed, unit, operator = opened.seed, opened.unit, operator or opened.operator
        text = opened.bench_text
        if bench_path is not None:
            text = _text_of(bench_path)
        parts = _bench_parts(text, str(bench_path or resume_path), visa) if text else _by_hand()
    else:
        if not design:
            raise EntryError("No design was named", "the design file of this unit", "Name it with --design")
        loaded = load_design(shipped.find_design(design))
        steps = load_procedure(shipped.find_procedure(procedure))
        parts = _bench_parts(_text_of(bench_path), str(bench_path), visa) if bench_path is not None else _by_hand()
    setting = Setting(
        kind="walk",
        design=loaded,
        procedure=steps,
        hands=Hands(),
        clock=WallClock(),
        records=records,
        seed=secrets.randbelow(2**31) if seed is None else seed,
        units=units,
        **parts,
    )
    return _with_person(Runner(setting), unit, operator, plain=plain, resume=resume_path)


STAND_IN = "stand-in"


def _bench_parts(text: str, name: str, visa: str = "") -> dict[str, Any]:
    from benchkit.instruments.bench import parse_bench

    bench = parse_bench(text, name, visa=visa)
    return {
        "setup": bench.setup,
        "bench_text": bench.text,
        "bench_sha256": bench.sha256,
        "accuracy": bench.accuracy,
        "supply_accuracy": bench.supply_accuracy,
        "cautions": tuple(bench.cautions),
    }


def _by_hand() -> dict[str, Any]:
    from benchkit.measure.accuracy import HANDHELD

    return {
        "setup": {"meter": None, "supply": None},
        "bench_text": "",
        "bench_sha256": "",
        "accuracy": HANDHELD,
        "supply_accuracy": HANDHELD,
    }


def _text_of(path: Path) -> str:
    from benchkit.errors import FileError

    try:
        return path.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        reason = error.strerror if isinstance(error, OSError) else "it is no UTF-8 text"
        raise FileError(str(path), "", f"can't be read: {reason}", "a bench file") from None


def _login() -> str:
    try:
        return getpass.getuser()
    except (OSError, KeyError):
        return ""


def _with_stand_in(
    runner: Runner, bench: BenchProcess, design: Design, seed: int, unit: str, *, wrong_end: bool, resume: Path | None
) -> int:
    from benchkit.rehearsal.standin import StandIn
    from benchkit.stage.draws import seeds

    trimmer = design.spreader.trimmer

    async def run() -> Closed:
        front = StandIn(
            bench.hands,
            turns=0.0 if trimmer is None else trimmer.turns,
            rng=seeds("stand-in", seed),
            say=click.echo,
            wrong_end=wrong_end,
        )
        _stop_on_signals(asyncio.get_running_loop(), runner)
        if resume is not None:
            return await runner.resume(front, resume, STAND_IN)
        return await runner.begin(front, unit, STAND_IN)

    return _finish(runner, run)


def _with_person(runner: Runner, unit: str, operator: str, *, plain: bool, resume: Path | None) -> int:
    if plain or not (sys.stdin.isatty() and sys.stdout.isatty()):
        return _in_lines(runner, unit, operator, resume)
    return _on_screen(runner, unit, operator, resume)


def _in_lines(runner: Runner, unit: str, operator: str, resume: Path | None) -> int:
    from benchkit.record.show import DEFERENCE
    from benchkit.ui.plain import PlainFront

    setting = runner.setting
    click.echo(f"benchkit: {setting.procedure.head.name}, {setting.design.name} {setting.design.revision}")
    click.echo(DEFERENCE)
    for caution in (*setting.procedure.head.cautions, *setting.cautions):
        click.echo(f"CAUTION: {caution}")
    if setting.kind == "rehearsal":
        click.echo(f"This is a rehearsal: no real unit is touched. Seed {setting.seed}.")
    while not unit.strip():
        unit = click.prompt("Serial number of the unit")
    while not operator.strip():
        operator = click.prompt("Operator", default=_login() or None)

    async def run() -> Closed:
        front = PlainFront(runner.off_now)
        _stop_on_signals(asyncio.get_running_loop(), runner)
        if resume is not None:
            return await runner.resume(front, resume, operator)
        return await runner.begin(front, unit, operator)

    return _finish(runner, run)


def _finish(runner: Runner, run: Callable[[], Awaitable[Closed]]) -> int:
    async def whole() -> Closed:
        return await run()

    try:
        closed = asyncio.run(whole())
    except BenchkitError as error:
        click.echo(f"benchkit: {error}", err=True)
        _say_end(runner)
        return error.exit_status
    except (click.Abort, KeyboardInterrupt):
        click.echo("The walk was left before its end.")
        _say_end(runner)
        return 4
    words = f"The walk is closed: {closed.verdict.upper()}."
    if closed.stopped:
        words += f" It was stopped: {closed.stopped.rstrip('.')}."
    click.echo(words)
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


def _on_screen(runner: Runner, unit: str, operator: str, resume: Path | None) -> int:
    from benchkit.ui.app import run_app
    from benchkit.ui.entry import Identity, Opening

    setting = runner.setting

    async def start(front: Front, identity: Identity) -> Closed:
        if resume is not None:
            return await runner.resume(front, resume, identity.operator)
        return await runner.begin(front, identity.unit, identity.operator)

    def beat() -> None:
        """Heartbeats are sent by the session, on this very loop, from the moment that there is something to mind."""

    opening = Opening(
        kind=setting.kind,
        design=f"{setting.design.name} {setting.design.revision}",
        procedure=setting.procedure.head.name,
        purpose=setting.procedure.head.purpose,
        meter=_named(setting.setup.get("meter")),
        supply=_named(setting.setup.get("supply")),
        record=str(resume or setting.records),
        unit=unit,
        operator=operator or _login(),
        resumed=resume is not None,
    )
    status = run_app(start, off_now=runner.off_now, heartbeat=beat, opening=opening, log_dir=setting.records / "logs")
    _say_end(runner)
    return status


def _named(table: Any) -> str:
    return "by hand" if table is None else str(table.get("address", "by hand"))
