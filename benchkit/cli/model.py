"""The commands that ask the model: expect, judge, check."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from benchkit.cli.options import Command, examples, print_json, procedure_option
from benchkit.errors import EntryError


@click.command(
    cls=Command,
    epilog=examples(
        "benchkit expect tern-40 --trimmer least --positive 15V --negative -15V",
        "benchkit expect my-stage.toml --trimmer target --when warm --json",
    ),
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

    if full and not as_json:
        raise EntryError("--full came without --json", "both together", "Without them the text has all of it")
    loaded = load_design(shipped.find_design(design))
    condition, loads_ohm = _condition(loaded, given), _loads(loads)
    found = expected_json(loaded, condition, units or DEFAULT_UNITS, seed)
    if not as_json:
        from benchkit.ui.expect_text import expect_lines

        click.echo("\n".join(expect_lines(loaded, condition, found, loads_ohm)))
        return 0
    from benchkit.ui.expect_text import beyond_the_design

    if caution := beyond_the_design(loaded, condition):
        click.echo(caution, err=True)
    if full:
        from benchkit.stage.more_expected import more_json

        found |= more_json(loaded, condition, loads_ohm)
    print_json(found)
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


@click.command(
    cls=Command,
    epilog=examples(
        "benchkit judge tern-40 readings.csv",
        "benchkit judge my-stage.toml a.csv b.csv --json",
    ),
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
            print_json(found.as_json())
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


@click.command(
    cls=Command,
    epilog=examples(
        "benchkit check my-stage.toml",
        "benchkit check my-stage.toml --procedure my-steps.toml",
    ),
)
@click.argument("design", metavar="DESIGN")
@procedure_option
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
        print_json({"format": 1, "design": loaded.name, "items": len(plan), "findings": findings})
    else:
        click.echo(f"{loaded.name} {loaded.revision} with {steps.head.name}: {len(plan)} items.")
        for finding in findings:
            click.echo(f"  {finding}")
        click.echo("Nothing to object." if not findings else f"{len(findings)} to look at.")
    return 1 if findings else 0
