"""What several commands share: the look of their help, options, JSON."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import click


class Command(click.Command):
    """A command whose epilog keeps its lines."""

    def format_epilog(self, context: click.Context, formatter: click.HelpFormatter) -> None:
        """Write the epilog line by line."""
        if self.epilog:
            formatter.write_paragraph()
            for line in self.epilog.splitlines():
                formatter.write(f"  {line}\n" if line else "\n")


class Group(click.Group):
    """A group of such commands."""

    command_class = Command
    group_class = type


def examples(*lines: str) -> str:
    """Return the lines of an example for a command's help."""
    return "\n".join(["Example:", *(f"  {line}" for line in lines)])


def print_json(value: Any) -> None:
    """Print one JSON value on one line."""
    click.echo(json.dumps(value, ensure_ascii=False, allow_nan=False))


def design_option(function: Callable[..., Any]) -> Callable[..., Any]:
    """Add ``--design``, which defaults to a demonstration design."""
    return click.option("--design", "-d", default="tern-40", show_default=True, metavar="FILE",
                        help="Design file, or the name of one that comes with benchkit.")(function)  # fmt: skip


def procedure_option(function: Callable[..., Any]) -> Callable[..., Any]:
    """Add ``--procedure``."""
    return click.option("--procedure", "-p", default="first-power-on", show_default=True, metavar="NAME|FILE",
                        help="Procedure file, or the name of one that comes with benchkit.")(function)  # fmt: skip


def records_option(function: Callable[..., Any]) -> Callable[..., Any]:
    """Add ``--records``."""
    return click.option("--records", type=click.Path(path_type=Path, file_okay=False), default=Path("records"),
                        show_default=True, metavar="DIR", help="Folder for the record.")(function)  # fmt: skip


def channels_option(function: Callable[..., Any]) -> Callable[..., Any]:
    """Add ``--channels``."""
    said = "Channels of one unit, a walk and a record each: how many (1 to 8), or their names (letters and digits)."
    return click.option("--channels", default=None, metavar="N|NAMES", help=said)(function)


def hands_options(function: Callable[..., Any]) -> Callable[..., Any]:
    """Add ``--no-hands-free`` and ``--no-bell``."""
    free = click.option("--no-hands-free", "hands_free", is_flag=True, flag_value=False, default=True,
                        help="No reading is taken without a key.")  # fmt: skip
    bell = click.option("--no-bell", "bell", is_flag=True, flag_value=False, default=True,
                        help="No bell when a reading was taken by itself.")  # fmt: skip
    return free(bell(function))


def visa_option(function: Callable[..., Any]) -> Callable[..., Any]:
    """Add ``--visa``."""
    said = "Another VISA library: a path, or what PyVISA takes, such as bench.yaml@sim."
    return click.option("--visa", default="", metavar="LIBRARY", help=said)(function)


def baud_option(function: Callable[..., Any]) -> Callable[..., Any]:
    """Add ``--baud``."""
    said = "Speed to try on a serial line instead of the profile's; may be given again."
    speed = click.IntRange(50, 4_000_000)
    return click.option("--baud", "bauds", type=speed, multiple=True, metavar="N", help=said)(function)
