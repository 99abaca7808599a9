"""The commands: thin.  Each parses, makes one library call, and prints.

Heavy imports stand inside the commands, so that ``benchkit --help`` answers at once.
"""

from __future__ import annotations

import json
import os
import sys
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any, NoReturn

import click

from benchkit import __version__
from benchkit.errors import BenchkitError, EntryError

CONTEXT = {"help_option_names": ["-h", "--help"], "max_content_width": 100}


class _Command(click.Command):
    """A command whose epilog keeps its lines."""

    def format_epilog(self, context: click.Context, formatter: click.HelpFormatter) -> None:
        if self.epilog:
            formatter.write_paragraph()
            for line in self.epilog.splitlines():
                formatter.write(f"  {line}\n" if line else "\n")


class _Group(click.Group):
    """A group of such commands."""

    command_class = _Command
    group_class = type


@click.group(cls=_Group, context_settings=CONTEXT)
@click.version_option(__version__, prog_name="benchkit")
def cli() -> None:
    """Stand beside the bench while a class-AB output stage is powered up and its bias is set.

    benchkit helps a qualified person; it is not a safety device, it certifies nothing, and it defers to local codes,
    the maker's service data and licensed practice. Where they differ from the screen, they win.

    Exit status: 0 done and passed, 1 done and failed or undecided, 2 wrong input, 3 instrument trouble, 4 stopped by
    the operator or by a safety trip, 5 an error of benchkit's own.
    """


def main(arguments: Sequence[str] | None = None) -> NoReturn:
    """Run a command and leave with its exit status; never with a traceback."""
    # The model's matrices are small: threads that share one out cost more than they save.
    for variable in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
        os.environ.setdefault(variable, "1")
    try:
        status = cli.main(args=None if arguments is None else list(arguments), standalone_mode=False)
        sys.exit(status if isinstance(status, int) else 0)
    except click.exceptions.Exit as leave:
        sys.exit(leave.exit_code)
    except click.Abort:
        _say("Stopped at the prompt.")
        sys.exit(4)
    except click.ClickException as error:
        error.show()
        sys.exit(2)
    except BenchkitError as error:
        _say(str(error))
        sys.exit(error.exit_status)
    except KeyboardInterrupt:
        _say("Stopped by the operator.")
        sys.exit(4)
    except BrokenPipeError:
        sys.exit(0)
    except Exception as error:
        _say(_own_error(error))
        sys.exit(5)


def _say(text: str) -> None:
    click.echo(f"benchkit: {text}", err=True)


def _own_error(error: Exception) -> str:
    import tempfile
    import traceback

    text = "".join(traceback.format_exception(error))
    try:
        with tempfile.NamedTemporaryFile("w", prefix="benchkit-error-", suffix=".txt", delete=False) as file:
            file.write(text)
        where = f"What is needed to find it stands in {file.name}."
    except OSError:
        where = "No file could be written about it."
    return f"This is an error of benchkit's own: {type(error).__name__}: {error}. {where} Please report it."


def _examples(*lines: str) -> str:
    return "\n".join(["Example:", *(f"  {line}" for line in lines)])


def _print_json(value: Any) -> None:
    click.echo(json.dumps(value, ensure_ascii=False, allow_nan=False))


def _design_option(function: Callable[..., Any]) -> Callable[..., Any]:
    return click.option("--design", "-d", default="tern-40", show_default=True, metavar="FILE",
                        help="Design file, or the name of one that comes with benchkit.")(function)  # fmt: skip


def _procedure_option(function: Callable[..., Any]) -> Callable[..., Any]:
    return click.option("--procedure", "-p", default="first-power-on", show_default=True, metavar="NAME|FILE",
                        help="Procedure file, or the name of one that comes with benchkit.")(function)  # fmt: skip


def _records_option(function: Callable[..., Any]) -> Callable[..., Any]:
    return click.option("--records", type=click.Path(path_type=Path, file_okay=False), default=Path("records"),
                        show_default=True, metavar="DIR", help="Folder for the record.")(function)  # fmt: skip


@cli.command(
    epilog=_examples(
        "benchkit rehearse",
        'benchkit rehearse --plain --stand-in --seed 7 --plant "emitter.upper.1: open"',
    )
)
@_design_option
@_procedure_option
@_records_option
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
@click.option("--operator", default="", metavar="NAME", help="Who stands at the bench.")
@click.option("--resume", "resume_path", type=click.Path(path_type=Path), default=None, metavar="RECORD",
              help="Go on with a rehearsal that was cut off.")  # fmt: skip
def rehearse(**options: Any) -> int:
    """Rehearse a walk on a simulated unit, with simulated instruments that answer over real sockets."""
    from benchkit.ui import launch

    return launch.rehearse(**options)


@cli.command(
    epilog=_examples(
        "benchkit walk --design my-stage.toml --bench bench.toml",
        "benchkit walk --resume records/T40-0017-a6ef3863-20260131T101500Z.jsonl",
    )
)
@click.option("--design", "-d", default="", metavar="FILE", help="Design file of the unit on the bench.")
@_procedure_option
@_records_option
@click.option("--bench", "bench_path", type=click.Path(path_type=Path), default=None, metavar="FILE",
              help="Bench file with the instruments; without it everything is set and read by hand.")  # fmt: skip
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
@click.option("--operator", default="", metavar="NAME", help="Who stands at the bench.")
@click.option("--resume", "resume_path", type=click.Path(path_type=Path), default=None, metavar="RECORD",
              help="Go on with a walk that was cut off.")  # fmt: skip
def walk(**options: Any) -> int:
    """Walk through a procedure on a real unit."""
    from benchkit.ui import launch

    return launch.walk(**options)


@cli.command(
    epilog=_examples(
        "benchkit expect tern-40 --trimmer least --positive 15V --negative -15V",
        "benchkit expect my-stage.toml --trimmer target --when warm --json",
    )
)
@click.argument("design", metavar="DESIGN")
@click.option("--positive", default=None, metavar="V", help="Positive rail; the design's if left out.")
@click.option("--negative", default=None, metavar="V", help="Negative rail; the design's if left out.")
@click.option("--limit", default=None, metavar="A", help="The supply's current limit; none if left out.")
@click.option("--trimmer", default="target", show_default=True, metavar="least|most|target|unknown|0..1")
@click.option("--when", type=click.Choice(["cold", "warm"]), default="cold", show_default=True)
@click.option("--ambient", default=None, metavar="degC", help="Ambient temperature; the design's if left out.")
@click.option("--units", type=click.IntRange(min=50), default=None, metavar="N", help="Units drawn for the limits.")
@click.option("--seed", type=click.IntRange(min=0), default=0, show_default=True, metavar="N")
@click.option("--load", "loads", multiple=True, metavar="OHM", default=("8 ohm", "4 ohm"), show_default=True,
              help="Load at the output for what a bias error costs; at most two.")  # fmt: skip
@click.option("--json", "as_json", is_flag=True, help="For programs.")
@click.option(
    "--full", is_flag=True, help="With --json: heat, trimmer and what a bias error costs too, as the text has."
)
def expect(
    design: str, as_json: bool, full: bool, units: int | None, seed: int, loads: tuple[str, ...], **given: Any
) -> int:
    """Say what every test point of a design should read, with limits that hold 99.73 % of units.

    Below the table: heat, what the trimmer can do, and what a wrong bias costs.
    """
    from benchkit import shipped
    from benchkit.stage.design import load_design
    from benchkit.stage.expected import DEFAULT_UNITS, expected_json

    loaded = load_design(shipped.find_design(design))
    condition, loads_ohm = _condition(loaded, given), _loads(loads)
    found = expected_json(loaded, condition, units or DEFAULT_UNITS, seed)
    if not as_json:
        from benchkit.ui.expect_text import expect_lines

        click.echo("\n".join(expect_lines(loaded, condition, found, loads_ohm)))
        return 0
    if full:
        from benchkit.stage.more_expected import more_json

        found |= more_json(loaded, condition, loads_ohm)
    _print_json(found)
    return 0


def _loads(texts: tuple[str, ...]) -> tuple[float, ...]:
    from benchkit import quantities

    if len(texts) > 2:
        raise EntryError(f"--load: {len(texts)} loads came", "one or two")
    loads = []
    for text in texts:
        try:
            ohm = quantities.parse(text, "ohm")
        except EntryError as error:
            raise EntryError(f"--load: {error.came}", error.expected, error.next_step) from None
        if not 0.5 <= ohm <= 1000.0:
            raise EntryError(f"--load: {quantities.show(ohm, 'ohm')} came", "0.5 ohm to 1 kohm")
        loads.append(ohm)
    return tuple(loads)


def _condition(design: Any, given: dict[str, Any]) -> Any:
    from benchkit import quantities
    from benchkit.stage.conditions import Condition, parse_trimmer

    def number(key: str, unit: str, default: float | None) -> float | None:
        text = given.get(key)
        if text is None:
            return default
        try:
            return quantities.parse(text, unit)
        except EntryError as error:
            raise EntryError(f"--{key}: {error.came}", error.expected, error.next_step) from None

    positive_v = number("positive", "V", design.rails.positive_v)
    negative_v = number("negative", "V", design.rails.negative_v)
    assert positive_v is not None
    assert negative_v is not None
    return Condition(
        positive_v=positive_v,
        negative_v=negative_v,
        limit_a=number("limit", "A", None),
        trimmer=parse_trimmer(given["trimmer"]),
        when=given["when"],
        ambient_c=number("ambient", "degC", None),
    )


@cli.command(
    epilog=_examples(
        "benchkit judge tern-40 readings.csv",
        "benchkit judge my-stage.toml a.csv b.csv --json",
    )
)
@click.argument("design", metavar="DESIGN")
@click.argument("readings", nargs=-1, required=True, type=click.Path(path_type=Path), metavar="READINGS.csv...")
@click.option("--bench", "bench_path", type=click.Path(path_type=Path), default=None, metavar="FILE",
              help="Bench file whose meter took the readings.")  # fmt: skip
@click.option("--units", type=click.IntRange(min=50), default=None, metavar="N", help="Units drawn for the limits.")
@click.option("--seed", type=click.IntRange(min=0), default=0, show_default=True, metavar="N")
@click.option("--json", "as_json", is_flag=True, help="For programs: one object a line for each file, in order.")
def judge(
    design: str, readings: tuple[Path, ...], bench_path: Path | None, units: int | None, seed: int, as_json: bool
) -> int:
    """Judge readings in CSV files, one unit a file: limits, named rules, suspects, what to read next."""
    from benchkit import shipped
    from benchkit.judge import table
    from benchkit.stage.design import load_design

    loaded = load_design(shipped.find_design(design))
    accuracy = None
    if bench_path is not None:
        from benchkit.instruments.bench import load_bench

        accuracy = load_bench(bench_path).accuracy
    tables = table.judge_files(
        loaded, [(str(path), _text_of(path)) for path in readings], accuracy=accuracy, units=units, seed=seed
    )
    for path, found in zip(readings, tables, strict=True):
        if as_json:
            _print_json(found.as_json())
        else:
            from benchkit.ui.judge_text import judged_text

            click.echo(judged_text(found, str(path)))
    return 0 if all(found.verdict == "pass" for found in tables) else 1


def _text_of(path: Path) -> str:
    from benchkit.errors import FileError

    try:
        return path.read_text(encoding="utf-8-sig")
    except OSError as error:
        raise FileError(str(path), "", f"can't be read: {error.strerror}", "a CSV file of readings") from None
    except UnicodeDecodeError as error:
        raise FileError(str(path), "", f"byte {error.start} is no UTF-8", "a CSV file in UTF-8") from None


@cli.group()
def record() -> None:
    """Verify, show and tabulate records."""


@record.command(
    "verify",
    epilog=_examples(
        "benchkit record verify records/*.jsonl",
    ),
)
@click.argument("records", nargs=-1, required=True, type=click.Path(path_type=Path), metavar="RECORD...")
@click.option("--json", "as_json", is_flag=True, help="For programs: one object a line.")
def record_verify(records: tuple[Path, ...], as_json: bool) -> int:
    """Check that records are whole: 0 whole and closed, 1 unfinished or torn at the end, 2 broken."""
    from benchkit.record import verify

    found = [verify.load(path) for path in records]
    for one in found:
        if as_json:
            _print_json(one.as_json())
        else:
            click.echo(one.as_text())
    return verify.worst(found)


@record.command(
    "show",
    epilog=_examples(
        "benchkit record show records/T40-0017-a6ef3863-20260131T101500Z.jsonl",
    ),
)
@click.argument("record_path", type=click.Path(path_type=Path), metavar="RECORD")
@click.option("--json", "as_json", is_flag=True, help="For programs.")
def record_show(record_path: Path, as_json: bool) -> int:
    """Show a record as a readable summary."""
    from benchkit.record import show, summary, verify

    found = summary.load_summary(record_path)
    if as_json:
        _print_json(show.as_json(found))
    else:
        click.echo(show.as_text(found))
    return 2 if verify.load(record_path).status == 2 else 0


@record.command(
    "table",
    epilog=_examples(
        "benchkit record table records/*.jsonl > readings.csv",
    ),
)
@click.argument("records", nargs=-1, required=True, type=click.Path(path_type=Path), metavar="RECORD...")
@click.option("--json", "as_json", is_flag=True, help="For programs: one object a reading.")
def record_table(records: tuple[Path, ...], as_json: bool) -> int:
    """Print all readings of records as CSV, one a row."""
    from benchkit.record import summary, table

    found = [summary.load_summary(path) for path in records]
    if as_json:
        for line in table.json_lines(found):
            click.echo(line)
    else:
        click.echo(table.csv_text(found), nl=False)
    return 0


@cli.command(
    epilog=_examples(
        "benchkit check my-stage.toml",
        "benchkit check my-stage.toml --procedure my-steps.toml",
    )
)
@click.argument("design", metavar="DESIGN")
@_procedure_option
@click.option(
    "--bench",
    "bench_path",
    type=click.Path(path_type=Path),
    default=None,
    metavar="FILE",
    help="A bench file to check too.",
)
@click.option("--json", "as_json", is_flag=True, help="For programs.")
def check(design: str, procedure: str, bench_path: Path | None, as_json: bool) -> int:
    """Check a design, a procedure and a bench file before anybody stands at the bench."""
    from benchkit import shipped
    from benchkit.procedure.file import load_procedure
    from benchkit.procedure.plan import make_plan
    from benchkit.stage.design import load_design
    from benchkit.stage.heat_checks import check_heat
    from benchkit.stage.reach import check_target

    loaded = load_design(shipped.find_design(design))
    steps = load_procedure(shipped.find_procedure(procedure))
    findings = [str(finding) for finding in (*check_target(loaded), *check_heat(loaded))]
    plan = make_plan(steps, loaded)
    if bench_path is not None:
        from benchkit.instruments.bench import load_bench

        findings += list(load_bench(bench_path).cautions)
    if as_json:
        _print_json({"format": 1, "design": loaded.name, "items": len(plan), "findings": findings})
    else:
        click.echo(f"{loaded.name} {loaded.revision} with {steps.head.name}: {len(plan)} items.")
        for finding in findings:
            click.echo(f"  {finding}")
        click.echo("Nothing to object." if not findings else f"{len(findings)} to look at.")
    return 1 if findings else 0


if __name__ == "__main__":
    main()
