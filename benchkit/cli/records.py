"""The commands about records."""

from __future__ import annotations

from pathlib import Path

import click

from benchkit.cli.options import Group, examples, print_json


@click.group(cls=Group)
def record() -> None:
    """Verify, show, compare and tabulate records."""


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
@click.option("--records", "folder", type=click.Path(path_type=Path, file_okay=False), default=None, metavar="DIR",
              help="Folder with earlier records of this unit; the record's own if left out.")  # fmt: skip
@click.option("--json", "as_json", is_flag=True, help="For programs.")
def record_show(record_path: Path, folder: Path | None, as_json: bool) -> int:
    """Show a record as a readable summary, against the last one of the same serial number and channel."""
    from benchkit.record import earlier, show, show_json, summary

    found = summary.load_summary(record_path)
    last = earlier.last_before(found, record_path.parent if folder is None else folder)
    if as_json:
        print_json(show_json.as_json(found, last))
    else:
        click.echo(show.as_text(found, last))
    return 2 if found.record.status == 2 else 0


@record.command(
    "compare",
    epilog=examples(
        "benchkit record compare records/before.jsonl records/after.jsonl",
    ),
)
@click.argument("before", type=click.Path(path_type=Path), metavar="BEFORE")
@click.argument("after", type=click.Path(path_type=Path), metavar="AFTER")
@click.option("--json", "as_json", is_flag=True, help="For programs.")
def record_compare(before: Path, after: Path, as_json: bool) -> int:
    """Compare the trimmed drops, the offset and the currents of two records."""
    from benchkit.record import comparing, summary

    found = comparing.compare(summary.load_summary(before), summary.load_summary(after))
    if as_json:
        print_json(found.as_json())
    else:
        click.echo(found.as_text())
    return 2 if 2 in (found.before.record.status, found.after.record.status) else 0


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


@record.command(
    "times",
    epilog=examples(
        "benchkit record times records/*.jsonl > times.csv",
    ),
)
@click.argument("records", nargs=-1, required=True, type=click.Path(path_type=Path), metavar="RECORD...")
@click.option("--json", "as_json", is_flag=True, help="For programs: one object a record.")
def record_times(records: tuple[Path, ...], as_json: bool) -> int:
    """Print how long each channel took as CSV, one record a row."""
    from benchkit.record import summary, times

    found = [summary.load_summary(path) for path in records]
    if as_json:
        for one in found:
            print_json(times.row(one))
    else:
        click.echo(times.csv_text(found), nl=False)
    return 0
