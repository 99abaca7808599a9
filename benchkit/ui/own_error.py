"""An error of benchkit's own, written down where somebody can look at it."""

from __future__ import annotations

import os
import traceback
from datetime import UTC, datetime
from pathlib import Path


def write_log(directory: Path, error: BaseException) -> str:
    """Write the traceback of `error` into a file in `directory`; return a sentence that says where, or why not."""
    name = f"benchkit-error-{datetime.now(UTC):%Y%m%dT%H%M%S}-{os.getpid()}.log"
    try:
        directory.mkdir(parents=True, exist_ok=True)
        path = directory / name
        path.write_text("".join(traceback.format_exception(error)), encoding="utf-8")
    except OSError as problem:
        return f" The details could not be written ({problem.strerror or problem})."
    return f" The details are in {path}."
