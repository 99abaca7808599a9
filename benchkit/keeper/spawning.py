"""Starting the keeper's processes: the keeper itself, and the stand-by that can only switch off."""

from __future__ import annotations

import os
import subprocess
import sys
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import benchkit
from benchkit.errors import FileError
from benchkit.keeper import platform
from benchkit.keeper.protocol import decode, encode

STAND_BY_LIMIT_S = 10.0
"""So long may the stand-by take to switch off, s."""


def spawn(arguments: list[str], log_dir: Path | None, lifeline: int | None = None) -> subprocess.Popen[bytes]:
    """Start a keeper's process in a group of its own, with the same benchkit as ours.

    Parameters
    ----------
    arguments : list of str
        Behind ``python -m benchkit.keeper``.
    log_dir : Path or None
        For ``keeper.log``.
    lifeline : int or None
        A descriptor that it inherits and is told of.

    Raises
    ------
    FileError
        If the log can't be made.
    """
    if lifeline is not None:
        arguments = [*arguments, "--lifeline", str(lifeline)]
    home = str(Path(benchkit.__file__).resolve().parent.parent)
    environment = dict(os.environ)
    environment["PYTHONPATH"] = os.pathsep.join(filter(None, [home, environment.get("PYTHONPATH", "")]))
    errors: Any = subprocess.DEVNULL
    if log_dir is not None:
        try:
            log_dir.mkdir(parents=True, exist_ok=True)
            errors = (log_dir / "keeper.log").open("ab")
        except OSError as error:
            reason = error.strerror or type(error).__name__
            raise FileError(
                str(log_dir), "", f"can't be made or written to: {reason}", "a folder for records", "Name another one"
            ) from None
    try:
        return subprocess.Popen(
            [sys.executable, "-m", "benchkit.keeper", *arguments],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=errors,
            env=environment,
            **platform.own_group(),
            **platform.inheriting(lifeline),
        )
    finally:
        if log_dir is not None:
            errors.close()


def switch_off_anew(supply: Mapping[str, Any] | None, reason: str) -> dict[str, Any]:
    """Switch a supply off by a process of its own; return the fields of an ``output off`` event.  Never raises.

    Parameters
    ----------
    supply : mapping or None
        As in the table for ``connect``; None if there is none.
    reason : str
        Why, for the event.
    """
    result: dict[str, Any] = {"reason": reason, "confirmed": False, "state": None}
    if supply is None:
        return {**result, "how": "benchkit has no supply that it could switch: switch it off by hand"}
    try:
        with spawn(["--off-only"], None) as process:
            try:
                answer, _ = process.communicate(encode({"supply": supply, "reason": reason}), STAND_BY_LIMIT_S)
            finally:
                platform.kill_hard(process)
        return decode(answer)
    except Exception as error:
        return {**result, "how": f"output state unknown: switch it off by hand ({error})"}
