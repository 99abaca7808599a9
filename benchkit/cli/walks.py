"""The commands that walk: rehearse and walk."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from benchkit.cli.options import (
    Command,
    channels_option,
    design_option,
    examples,
    hands_options,
    procedure_option,
    records_option,
    visa_option,
)


@click.command(
    cls=Command,
    epilog=examples(
        "benchkit rehearse",
        'benchkit rehearse --plain --stand-in --seed 7 --plant "emitter.upper.1: open"',
        "benchkit rehearse --channels L,R",
    ),
)
@design_option
@procedure_option
@records_option
@click.option("--plain", is_flag=True, help="Lines of text instead of screens.")
@click.option("--stand-in", is_flag=True, help="A simulated technician does everything, as fast as it can.")
@click.option(
    "--seed",
    type=click.IntRange(min=0),
    default=None,
    metavar="N",
    help="Seed of the simulated unit and of the limits.",
)
@click.option("--plant", default="", metavar='"PART: FAULT"', help="Plant a fault in the simulated unit.")
@click.option("--wrong-end", is_flag=True, help="The stand-in turns the trimmer to the wrong end first.")
@click.option("--units", type=click.IntRange(min=50), default=None, metavar="N", help="Units drawn for the limits.")
@click.option("--unit", default="", metavar="SERIAL", help="Serial number for the record.")
@channels_option
@hands_options
@click.option("--operator", default="", metavar="NAME", help="Who stands at the bench.")
@click.option("--resume", "resume_path", type=click.Path(path_type=Path), default=None, metavar="RECORD",
              help="Go on with a rehearsal that was cut off.")  # fmt: skip
def rehearse(**options: Any) -> int:
    """Rehearse a walk on a simulated unit, with simulated instruments that answer over real sockets."""
    from benchkit.ui import launch

    _demand_free(options["resume_path"])
    return launch.rehearse(**options)


@click.command(
    cls=Command,
    epilog=examples(
        "benchkit walk --design my-stage.toml --bench bench.toml",
        "benchkit walk --design my-stage.toml --bench bench.toml --channels 2",
        "benchkit walk --resume records/T40-0017-a6ef3863-20260131T101500Z.jsonl",
    ),
)
@click.option("--design", "-d", default="", metavar="FILE", help="Design file of the unit on the bench.")
@procedure_option
@records_option
@click.option("--bench", "bench_path", type=click.Path(path_type=Path), default=None, metavar="FILE",
              help="Bench file with the instruments; without it everything is set and read by hand.")  # fmt: skip
@visa_option
@click.option("--plain", is_flag=True, help="Lines of text instead of screens.")
@click.option(
    "--seed",
    type=click.IntRange(min=0),
    default=None,
    metavar="N",
    help="Seed of the limits; a random one if left out.",
)
@click.option("--units", type=click.IntRange(min=50), default=None, metavar="N", help="Units drawn for the limits.")
@click.option("--unit", default="", metavar="SERIAL", help="Serial number of the unit.")
@channels_option
@hands_options
@click.option("--operator", default="", metavar="NAME", help="Who stands at the bench.")
@click.option("--resume", "resume_path", type=click.Path(path_type=Path), default=None, metavar="RECORD",
              help="Go on with a walk that was cut off.")  # fmt: skip
def walk(**options: Any) -> int:
    """Walk through a procedure on a real unit."""
    from benchkit.ui import launch

    _demand_free(options["resume_path"])
    return launch.walk(**options)


def _demand_free(record: Path | None) -> None:
    """Refuse a record that another process is writing before anything is said or started for it.

    Whoever goes on with it takes its lock for good later on; this look only spares a person a false start.
    """
    from benchkit.errors import RecordError
    from benchkit.journal.locking import try_lock

    if record is None:
        return
    try:
        with record.open("rb") as file:
            free = try_lock(file.fileno())
    except OSError:
        # What is wrong with it is said where it is read.
        return
    if not free:
        raise RecordError(
            str(record), "", "another process is writing this record", "nobody else", "Close the other benchkit first"
        )
