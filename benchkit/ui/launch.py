"""Puts bench, session and front end together for the commands ``rehearse`` and ``walk``."""

from __future__ import annotations

import secrets
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any, Final

from benchkit import shipped
from benchkit.errors import EntryError
from benchkit.events import WalkOpened
from benchkit.session.clock import SimulatedClock, WallClock
from benchkit.session.front import Front
from benchkit.session.hands import Hands
from benchkit.session.start import Runner, Setting, design_and_procedure, opened_of
from benchkit.ui.series import Turn, first_turn, parse_channels, resumed_turn
from benchkit.ui.walking import STAND_IN, Ready, by_itself, login, with_person

if TYPE_CHECKING:
    from benchkit.procedure.file import Procedure
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
    channels: str | None = None,
    hands_free: bool = True,
    bell: bool = True,
) -> int:
    """Rehearse; returns the exit status.

    Each channel has a stage of its own, and so a seed of its own: the first one's, and on from there.  A fault is
    planted in the first walk.
    """
    from benchkit.rehearsal.mishaps import parse_mishap

    names = parse_channels(channels)
    if resume_path is not None:
        opened = opened_of(resume_path)
        if opened.kind != "rehearsal":
            raise EntryError(
                f"{resume_path} is the record of a real walk", "a rehearsal", "Go on with benchkit walk --resume"
            )
        loaded, steps = design_and_procedure(opened, resume_path)
        turn = resumed_turn(names, opened.unit, opened.channel)
        first_seed, plant = opened.seed, opened.plant
        operator = operator or opened.operator
    else:
        loaded, steps = _loaded(design, procedure)
        turn = first_turn(names, unit)
        first_seed = secrets.randbelow(2**31) if seed is None else seed
    if plant:
        parse_mishap(plant, loaded)

    @contextmanager
    def prepare(turn: Turn) -> Iterator[Ready]:
        from benchkit.rehearsal.bench_client import start_bench

        own_seed, planted = first_seed + turn.number, "" if turn.number else plant
        bench = start_bench(loaded.text, seed=own_seed, plant=planted, clock="manual" if stand_in else "follow")
        try:
            if steps.head.unknown_trimmer:
                bench.hands.trimmer_to("as found")
            hands = Hands(bench.hands, own_screwdriver=stand_in)
            setting = Setting(
                kind="rehearsal",
                design=loaded,
                procedure=steps,
                hands=hands,
                clock=SimulatedClock(hands.advance, None if stand_in else PACE),
                records=records,
                seed=own_seed,
                plant=planted,
                units=units,
                narrow_rarely=stand_in,
                hands_free=hands_free,
                bell=bell,
                channel=turn.channel,
                **_bench_parts(bench.bench_text, "the rehearsal's bench"),
            )
            yield Ready(
                runner=Runner(setting),
                unit=turn.unit or f"rehearsal-{own_seed}",
                resume=None if turn.number else resume_path,
                stand_in=lambda: _stand_in(bench, loaded, own_seed, wrong_end=wrong_end),
            )
        finally:
            bench.stop()

    if stand_in:
        return by_itself(prepare, turn)
    return with_person(prepare, turn, operator or login(), plain=plain, bell=bell)


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
    channels: str | None = None,
    hands_free: bool = True,
    bell: bool = True,
) -> int:
    """Walk on a real unit, or go on with one; returns the exit status."""
    names = parse_channels(channels)
    if resume_path is not None:
        opened = opened_of(resume_path)
        if opened.kind == "rehearsal":
            return rehearse(
                design=design, procedure=procedure, records=records, plain=plain, stand_in=opened.operator == STAND_IN,
                seed=None, plant="", wrong_end=False, units=units, unit="", operator=operator, resume_path=resume_path,
                channels=channels, hands_free=hands_free, bell=bell,
            )  # fmt: skip
        loaded, steps = design_and_procedure(opened, resume_path)
        turn = resumed_turn(names, opened.unit, opened.channel)
        seed, operator = opened.seed, operator or opened.operator
        parts = _parts_of(opened, bench_path, resume_path, visa)
    else:
        if not design:
            raise EntryError("No design was named", "the design file of this unit", "Name it with --design")
        loaded, steps = _loaded(design, procedure)
        turn = first_turn(names, unit)
        parts = _bench_parts(_text_of(bench_path), str(bench_path), visa) if bench_path is not None else _by_hand()
    own_seed = secrets.randbelow(2**31) if seed is None else seed

    @contextmanager
    def prepare(turn: Turn) -> Iterator[Ready]:
        setting = Setting(
            kind="walk",
            design=loaded,
            procedure=steps,
            hands=Hands(),
            clock=WallClock(),
            records=records,
            seed=own_seed,
            units=units,
            hands_free=hands_free,
            bell=bell,
            channel=turn.channel,
            **parts,
        )
        yield Ready(runner=Runner(setting), unit=turn.unit, resume=None if turn.number else resume_path)

    return with_person(prepare, turn, operator, plain=plain, bell=bell)


def _loaded(design: str, procedure: str) -> tuple[Design, Procedure]:
    from benchkit.procedure.file import load_procedure
    from benchkit.stage.design import load_design

    return load_design(shipped.find_design(design)), load_procedure(shipped.find_procedure(procedure))


def _stand_in(bench: BenchProcess, design: Design, seed: int, *, wrong_end: bool) -> Front:
    import click

    from benchkit.rehearsal.standin import StandIn
    from benchkit.stage.draws import seeds

    trimmer = design.spreader.trimmer
    return StandIn(
        bench.hands,
        turns=0.0 if trimmer is None else trimmer.turns,
        rng=seeds("stand-in", seed),
        say=click.echo,
        wrong_end=wrong_end,
    )


def _parts_of(opened: WalkOpened, bench_path: Path | None, record: Path, visa: str) -> dict[str, Any]:
    """Return the bench of a walk that is gone on with: the one that is named now, else that of the record."""
    text = opened.bench_text if bench_path is None else _text_of(bench_path)
    return _bench_parts(text, str(bench_path or record), visa) if text else _by_hand()


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


ASSUMED: Final = (
    "No accuracy of your meter is stated: taken as {accuracy}. What that can't tell stays undecided, resistors of a "
    "fraction of an ohm first of all; a bench file with the meter's accuracy alone mends that."
)


def _by_hand() -> dict[str, Any]:
    from benchkit.measure.accuracy import HANDHELD

    return {
        "setup": {"meter": None, "supply": None},
        "bench_text": "",
        "bench_sha256": "",
        "accuracy": HANDHELD,
        "supply_accuracy": HANDHELD,
        "cautions": (ASSUMED.format(accuracy=HANDHELD.name),),
    }


def _text_of(path: Path) -> str:
    from benchkit.errors import FileError

    try:
        return path.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        reason = error.strerror if isinstance(error, OSError) else "it is no UTF-8 text"
        raise FileError(str(path), "", f"can't be read: {reason}", "a bench file") from None
