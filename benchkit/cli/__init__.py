"""The commands: thin.  Each parses, makes one library call, and prints.

Heavy imports stand inside the commands, so that ``benchkit --help`` answers at once.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Sequence
from typing import NoReturn

import click

from benchkit import __version__
from benchkit.cli.instruments import instruments
from benchkit.cli.model import check, expect, judge
from benchkit.cli.options import Group
from benchkit.cli.records import record
from benchkit.cli.walks import rehearse, walk
from benchkit.errors import BenchkitError

__all__ = ["cli", "main"]

CONTEXT = {"help_option_names": ["-h", "--help"], "max_content_width": 100}


@click.group(cls=Group, context_settings=CONTEXT)
@click.version_option(__version__, prog_name="benchkit")
def cli() -> None:
    """Stand beside the bench while a class-AB output stage is powered up and its bias is set.

    benchkit helps a qualified person; it is not a safety device, it certifies nothing, and it defers to local codes,
    the maker's service data and licensed practice. Where they differ from the screen, they win.

    Exit status: 0 done and passed, 1 done and failed or undecided, 2 wrong input, 3 instrument trouble, 4 stopped by
    the operator or by a safety trip, 5 an error of benchkit's own.
    """


for _one in (rehearse, walk, expect, judge, record, check, instruments):
    cli.add_command(_one)


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
