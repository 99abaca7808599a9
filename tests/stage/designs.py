"""Designs for the stage's tests: the demonstration files, and changes to them as text."""

from __future__ import annotations

from functools import cache
from pathlib import Path

from benchkit.stage.design import Design, load_design, parse_design

FOLDER = Path(__file__).parents[2] / "procedures" / "designs"
TERN = FOLDER / "tern-40.toml"
BREADBOARD = FOLDER / "breadboard.toml"
DEMONSTRATIONS = (TERN, BREADBOARD)


@cache
def tern() -> Design:
    return load_design(TERN)


@cache
def breadboard() -> Design:
    return load_design(BREADBOARD)


def changed(path: Path, *changes: tuple[str, str]) -> Design:
    """A design file with pieces of its text replaced; each piece must be there exactly once."""
    return parse_design(changed_text(path, *changes), path.name)


def changed_text(path: Path, *changes: tuple[str, str]) -> str:
    text = path.read_text(encoding="utf-8")
    for old, new in changes:
        assert text.count(old) == 1, f"{old!r} is there {text.count(old)} times"
        text = text.replace(old, new)
    return text
