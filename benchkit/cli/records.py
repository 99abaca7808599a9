"""The commands about records."""

from __future__ import annotations

from pathlib import Path

import click

from benchkit.cli.options import Group, examples, print_json


@click.group(cls=Group)
def record() -> None:
    """Verify, show and tabulate records."""


@record.command(
    "verify",
    epilog=examples(
        "benchkit record verify records/*.jsonl",
    ),
)
@click.argument("records", nargs=-1, required=True, type=click.Path(path_type=Path), metavar="RECORD...")
@click.option("--json", "as_json", is_flag=True, help="For programs: one object a line.")
def record_verify(records: tuple[Path, ...], as_json: bool) -> int:
    """Check that records are whole: 0 whole and closed, 1 unfinished or torn at the end, 2 broken or unreadable."""
    from benchkit.errors import RecordError
    from benchkit.record import verify

    found = []
    unreadable = 0
    for path in records:
        try:
            one = verify.load(path)
        except RecordError as error:
            # The others are looked at all the same.
            click.echo(f"benchkit: {error}", err=True)
            unreadable = error.exit_status
            continue
        found.append(one)
        if as_json:
            print_json(one.as_json())
        else:
            click.echo(one.as_text())
    return max(verify.worst(found), unreadable)


@record.command(
    "show",
    epilog=examples(
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
        print_json(show.as_json(found))
    else:
        click.echo(show.as_text(found))
    return 2 if verify.load(record_path).status == 2 else 0


@record.command(
    "table",
    epilog=examples(
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
