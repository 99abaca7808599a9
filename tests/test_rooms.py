"""The rooms of the program: imports point down, and each room keeps away from what is not its business.

Every import counts: at the top of a module, inside a function, under ``TYPE_CHECKING``, relative, or by
``importlib.import_module("...")``.  Starting another process (``python -m benchkit.keeper``) is no import.
"""

from __future__ import annotations

import ast
import os
import subprocess
import sys
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path

import pytest

import benchkit

PACKAGE = Path(benchkit.__file__).parent

LEVELS: tuple[frozenset[str], ...] = tuple(
    frozenset(level)
    for level in (
        {"ui", "cli", "__main__"},
        {"rehearsal"},
        {"session"},
        {"record"},
        {"procedure"},
        {"keeper"},
        {"instruments"},
        {"judge"},
        {"stage"},
        {"circuit"},
        {"journal"},
        {"measure", "events", "quantities", "errors", "shipped"},
    )
)
"""The rooms from the top to the bottom; a room may import its own level and those below it."""

NEVER: Mapping[str, frozenset[str]] = {
    "ui": frozenset({"benchkit.circuit", "benchkit.instruments", "benchkit.cli", "pyvisa", "serial", "scipy"}),
    "cli": frozenset({"benchkit.circuit", "pyvisa", "serial"}),
    "session": frozenset({"textual", "rich", "click", "pyvisa", "serial"}),
    "record": frozenset({"benchkit.keeper", "benchkit.instruments", "textual", "pyvisa", "socket"}),
    "procedure": frozenset(
        {
            "time",
            "datetime",
            "sched",
            "signal",
            "random",
            "secrets",
            "socket",
            "ssl",
            "select",
            "selectors",
            "asyncio",
            "threading",
            "multiprocessing",
            "concurrent",
            "subprocess",
            "textual",
            "rich",
            "click",
            "curses",
            "pyvisa",
            "serial",
            "benchkit.keeper",
            "benchkit.instruments",
            "benchkit.journal",
        }
    ),
    "keeper": frozenset(
        {"benchkit.judge", "benchkit.stage", "benchkit.circuit", "textual", "numpy", "pandas", "scipy"}
    ),
    "instruments": frozenset({"benchkit.judge", "benchkit.stage", "benchkit.circuit", "textual", "pandas", "scipy"}),
    "judge": frozenset({"textual", "pyvisa", "socket", "asyncio", "subprocess"}),
    "stage": frozenset({"textual", "pyvisa", "socket", "asyncio"}),
    "circuit": frozenset({"benchkit.stage", "benchkit.events", "textual", "pyvisa", "socket", "asyncio"}),
    "journal": frozenset({"benchkit.events", "benchkit.measure", "numpy", "textual", "pyvisa", "socket", "asyncio"}),
    "measure": frozenset({"textual", "pyvisa", "socket", "asyncio", "pandas"}),
}
"""What a room never imports, beyond everything above it."""  # fmt: skip

BUT: Mapping[str, frozenset[str]] = {
    "ui": frozenset({"benchkit.instruments.bench"}),
}
"""Exceptions from `NEVER`: to read a bench file is not to talk to an instrument."""

ONLY_IN: Mapping[str, frozenset[str]] = {
    "benchkit.rehearsal": frozenset({"rehearsal", "ui", "cli", "__main__"}),
    "textual": frozenset({"ui", "cli", "__main__"}),
    "click": frozenset({"cli", "ui", "__main__"}),
    "pyvisa": frozenset({"instruments"}),
    "pyvisa_py": frozenset({"instruments"}),
    "serial": frozenset({"instruments"}),
}
"""What only these rooms may import."""

SLOW_TO_IMPORT = frozenset({"pandas", "scipy", "pyvisa", "textual", "numpy"})

_CLOCK_WORDS = frozenset({"now", "utcnow", "today", "monotonic", "perf_counter", "time_ns", "sleep"})


@dataclass(frozen=True)
class Import:
    """`module`, in `file`, imports `target` on `line`."""

    module: str
    target: str
    line: int

    @property
    def room(self) -> str:
        return room_of(self.module)


def room_of(module: str) -> str:
    """Return the room that a dotted module name belongs to; ``""`` for the package itself and for others'."""
    parts = module.split(".")
    return parts[1] if parts[0] == "benchkit" and len(parts) > 1 else ""


def imports_of(module: str, source: str, *, is_package: bool) -> Iterator[Import]:
    """Yield everything that `source` imports, wherever it does so."""
    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.Import):
            for alias in node.names:
                yield Import(module, alias.name, node.lineno)
        elif isinstance(node, ast.ImportFrom):
            base = _absolute(module, node.level, node.module or "", is_package)
            for alias in node.names:
                yield Import(module, f"{base}.{alias.name}", node.lineno)
        elif isinstance(node, ast.Call) and _called(node) in ("import_module", "__import__"):
            first = node.args[0] if node.args else None
            if isinstance(first, ast.Constant) and isinstance(first.value, str):
                yield Import(module, first.value, node.lineno)
            else:
                yield Import(module, "an import whose name is computed", node.lineno)


def _absolute(module: str, level: int, name: str, is_package: bool) -> str:
    if level == 0:
        return name
    parts = module.split(".")
    up = level - 1 if is_package else level
    parts = parts[: len(parts) - up]
    return ".".join([*parts, name] if name else parts)


def _called(node: ast.Call) -> str:
    if isinstance(node.func, ast.Attribute):
        return node.func.attr
    return node.func.id if isinstance(node.func, ast.Name) else ""


def faults_of(imported: Import) -> Iterator[str]:
    """Yield what is wrong with one import, in words."""
    where = f"{imported.module}, line {imported.line}, imports {imported.target}"
    target_room = room_of(imported.target)
    if imported.target.startswith("an import"):
        yield f"{where}: a test can't see what that is"
        return
    if imported.room and target_room in ALL_ROOMS and level_of(target_room) < level_of(imported.room):
        yield f"{where}: that points up"
    for forbidden in NEVER.get(imported.room, ()):
        excepted = any(_is_in(imported.target, name) for name in BUT.get(imported.room, ()))
        if _is_in(imported.target, forbidden) and not excepted:
            yield f"{where}: the room {imported.room!r} never does"
    for name, rooms in ONLY_IN.items():
        if _is_in(imported.target, name) and imported.room not in rooms:
            yield f"{where}: only {', '.join(sorted(rooms))} may"


def _is_in(target: str, name: str) -> bool:
    return target == name or target.startswith(name + ".")


ALL_ROOMS = frozenset().union(*LEVELS)


def level_of(room: str) -> int:
    """Return how far from the top a room is."""
    return next(number for number, rooms in enumerate(LEVELS) if room in rooms)


def modules() -> dict[str, Path]:
    """Return every module of the package by its dotted name."""
    found: dict[str, Path] = {}
    for path in sorted(PACKAGE.rglob("*.py")):
        parts = ["benchkit", *path.relative_to(PACKAGE).with_suffix("").parts]
        if parts[-1] == "__init__":
            parts.pop()
        found[".".join(parts)] = path
    return found


def test_every_module_stands_in_a_known_room() -> None:
    strangers = {name for name in modules() if name != "benchkit" and room_of(name) not in ALL_ROOMS}
    assert not strangers, "give these a place in LEVELS"


@pytest.mark.parametrize("room", sorted(ALL_ROOMS))
def test_imports_point_down_and_keep_to_the_rooms_business(room: str) -> None:
    mine = {name: path for name, path in modules().items() if room_of(name) == room}
    assert mine, f"the room {room!r} holds no module: is it still there?"
    faults = [
        fault
        for name, path in mine.items()
        for imported in imports_of(name, path.read_text(encoding="utf-8"), is_package=path.name == "__init__.py")
        for fault in faults_of(imported)
    ]
    assert not faults, "\n".join(faults)


def test_the_package_itself_imports_nothing_of_its_own() -> None:
    path = PACKAGE / "__init__.py"
    found = list(imports_of("benchkit", path.read_text(encoding="utf-8"), is_package=True))
    assert not [imported for imported in found if imported.target.startswith("benchkit")]


def test_no_two_modules_import_each_other_in_a_ring() -> None:
    """At the top of modules only: a ring of those makes the program depend on what is imported first."""
    known = modules()
    graph: dict[str, set[str]] = {}
    for name, path in known.items():
        tree = ast.parse(path.read_text(encoding="utf-8"))
        tree.body = [node for node in tree.body if isinstance(node, (ast.Import, ast.ImportFrom))]
        targets: set[str] = set()
        for imported in imports_of(name, ast.unparse(tree), is_package=path.name == "__init__.py"):
            target = imported.target
            while target and target not in known:
                target = target.rpartition(".")[0]
            if target and target != name and target != "benchkit":
                targets.add(target)
        graph[name] = targets
    assert ring_in(graph) == []


def ring_in(graph: Mapping[str, set[str]]) -> list[str]:
    """Return one ring of `graph`, or nothing."""
    done: set[str] = set()

    def visit(name: str, path: list[str]) -> list[str]:
        if name in path:
            return [*path[path.index(name) :], name]
        if name in done:
            return []
        for target in sorted(graph.get(name, ())):
            ring = visit(target, [*path, name])
            if ring:
                return ring
        done.add(name)
        return []

    for name in sorted(graph):
        ring = visit(name, [])
        if ring:
            return ring
    return []


def test_the_walk_reads_no_clock() -> None:
    """Time reaches the state machine as an argument; it never asks for it."""
    for name, path in modules().items():
        if room_of(name) != "procedure":
            continue
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            if isinstance(node, ast.Call):
                assert _called(node) not in _CLOCK_WORDS, f"{name}, line {node.lineno}"


def test_slow_libraries_are_not_imported_at_the_top_of_the_commands() -> None:
    """``benchkit --help`` answers at once; see also the test that measures it."""
    names = [name for name in modules() if room_of(name) == "cli"]
    for name in ("benchkit", "benchkit.__main__", "benchkit.errors", *names):
        tree = ast.parse(modules()[name].read_text(encoding="utf-8"))
        for node in tree.body:
            if isinstance(node, (ast.Import, ast.ImportFrom)):
                for imported in imports_of(name, ast.unparse(node), is_package=name in ("benchkit", "benchkit.cli")):
                    assert imported.target.split(".")[0] not in SLOW_TO_IMPORT, imported


@pytest.mark.parametrize(
    ("module", "source", "words"),
    [
        ("benchkit.circuit.solve", "import benchkit.stage.design\n", "points up"),
        ("benchkit.circuit.solve", "from benchkit.stage import design\n", "points up"),
        ("benchkit.circuit.solve", "from benchkit import stage\n", "points up"),
        ("benchkit.circuit.solve", "from ..stage import design\n", "points up"),
        ("benchkit.circuit.solve", "from .. import stage\n", "points up"),
        ("benchkit.circuit.solve", "def f():\n    import benchkit.stage\n", "points up"),
        (
            "benchkit.circuit.solve",
            "from typing import TYPE_CHECKING\nif TYPE_CHECKING:\n    from benchkit.stage.design import Design\n",
            "points up",
        ),
        ("benchkit.circuit.solve", "import importlib\nimportlib.import_module('benchkit.stage')\n", "points up"),
        ("benchkit.circuit.solve", "import importlib\nimportlib.import_module(name)\n", "can't see"),
        ("benchkit.session.run", "import benchkit.rehearsal.bench_client\n", "points up"),
        ("benchkit.record.show", "from benchkit.rehearsal import stand_in\n", "only __main__, cli, rehearsal, ui"),
        ("benchkit.procedure.walk", "import time\n", "never does"),
        ("benchkit.procedure.walk", "from asyncio import sleep\n", "never does"),
        ("benchkit.procedure.walk", "from textual.app import App\n", "never does"),
        ("benchkit.keeper.serve", "import benchkit.stage.points\n", "never does"),
        ("benchkit.journal.reader", "from benchkit.events import Closed\n", "never does"),
        ("benchkit.rehearsal.unit", "from textual import on\n", "may"),
        ("benchkit.session.run", "import pyvisa\n", "may"),
        ("benchkit.errors", "from benchkit.journal.line import parse_line\n", "points up"),
        ("benchkit.ui.app", "import benchkit.cli\n", "never does"),
        ("benchkit.ui.app", "from benchkit.instruments import bench, meter\n", "instruments.meter"),
    ],
)
def test_a_wrong_import_is_found(module: str, source: str, words: str) -> None:
    faults = [fault for imported in imports_of(module, source, is_package=False) for fault in faults_of(imported)]
    assert any(words in fault for fault in faults), faults


@pytest.mark.parametrize(
    ("module", "source", "is_package"),
    [
        ("benchkit.stage.expected", "from benchkit.circuit.solve import compile_netlist\n", False),
        ("benchkit.stage", "from . import design\n", True),
        ("benchkit.ui.app", "from benchkit.rehearsal import bench_client\nfrom textual.app import App\n", False),
        ("benchkit.events", "from benchkit.measure.readings import Reading\n", False),
        ("benchkit.circuitry", "import numpy\n", False),
        ("benchkit.ui.launch", "from benchkit.instruments.bench import parse_bench\n", False),
    ],
)
def test_a_right_import_is_let_through(module: str, source: str, is_package: bool) -> None:
    found = imports_of(module, source, is_package=is_package)
    assert [fault for imported in found for fault in faults_of(imported)] == []


def test_a_ring_is_found() -> None:
    assert ring_in({"a": {"b"}, "b": {"c"}, "c": {"b"}}) == ["b", "c", "b"]
    assert ring_in({"a": {"b", "c"}, "b": {"c"}, "c": set()}) == []


@pytest.mark.parametrize("option", ["--help", "--version"])
def test_help_and_version_start_without_the_slow_libraries(option: str, tmp_path: Path) -> None:
    finished = subprocess.run(
        [sys.executable, "-X", "importtime", "-m", "benchkit", option],
        capture_output=True,
        text=True,
        encoding="utf-8",
        timeout=120,
        check=False,
        cwd=tmp_path,
        env={**os.environ, "PYTHONPATH": str(PACKAGE.parent)},
    )
    assert finished.returncode == 0, finished.stderr[-2000:]
    assert "benchkit" in finished.stdout
    imported = {
        line.rpartition("|")[2].strip().split(".")[0]
        for line in finished.stderr.splitlines()
        if line.startswith("import time:")
    }
    assert "click" in imported, "the list of imports could not be read"
    assert not imported & SLOW_TO_IMPORT
