"""Where the procedures and demonstration designs are that come with benchkit.

In an installed package they stand in ``benchkit/_procedures``, in a checkout in ``procedures/`` beside the package.
"""

from __future__ import annotations

from pathlib import Path

from benchkit.errors import FileError


def folder() -> Path:
    """Return the folder of shipped procedures; its ``designs`` holds the designs."""
    package = Path(__file__).resolve().parent
    installed = package / "_procedures"
    return installed if installed.is_dir() else package.parent / "procedures"


def find_procedure(name: str) -> Path:
    """Return the file of a procedure, given as a shipped name or as a path.

    Raises
    ------
    FileError
        When there is no such file.
    """
    return _find(name, folder(), "a procedure")


def find_design(name: str) -> Path:
    """Return the file of a design, given as a shipped name or as a path.

    Raises
    ------
    FileError
        When there is no such file.
    """
    return _find(name, folder() / "designs", "a design")


def _find(name: str, place: Path, what: str) -> Path:
    path = Path(name)
    if path.suffix == ".toml" or len(path.parts) > 1:
        if path.is_file():
            return path
        if path.is_dir():
            raise FileError(name, "", "this is a folder", f"{what} file", "Name a file in it")
        raise FileError(name, "", "there is no such file", f"{what} file", "Check the name and the folder")
    known = sorted(file.stem for file in place.glob("*.toml"))
    if name in known:
        return place / f"{name}.toml"
    if path.is_file():
        return path
    raise FileError(name, "", f"there is no {what[2:]} of that name", f"a file, or one of {', '.join(known)}")
