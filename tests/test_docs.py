"""The documents tell the truth: commands and options exist, files in them can be read, sentences agree.

A command without help, an example, or a place in the README fails here; so does an example that names an option which
the command doesn't have.
"""

from __future__ import annotations

import re
import shlex
from collections.abc import Iterator
from pathlib import Path
from typing import get_args

import click
import pytest

import benchkit
from benchkit import cli, errors, shipped
from benchkit.instruments.bench import parse_bench
from benchkit.instruments.profile import MeterProfile, SupplyProfile, meter_profile, profile_table, shipped_names
from benchkit.instruments.profile_parts import LinePart, LinkPart, NumbersPart, Part, TimingPart
from benchkit.instruments.profile_supply import Answers, Outputs, SupplyCommands, SupplyQuestions
from benchkit.measure.readings import FUNCTIONS
from benchkit.procedure import file as procedure_file
from benchkit.record.show import DEFERENCE
from benchkit.stage.design import parse_design
from tests.test_rooms import LEVELS, PACKAGE

ROOT = Path(__file__).resolve().parent.parent
README = (ROOT / "README.md").read_text(encoding="utf-8")
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
CHANGELOG = (ROOT / "CHANGELOG.md").read_text(encoding="utf-8")
DOCUMENTS = {"README.md": README, "DEVELOPERS.md": DEVELOPERS, "CHANGELOG.md": CHANGELOG}


def commands() -> dict[str, click.Command]:
    """Return every command by its whole name, ``benchkit`` itself and groups included."""
    found: dict[str, click.Command] = {}

    def visit(name: str, command: click.Command) -> None:
        found[name] = command
        if isinstance(command, click.Group):
            for word, below in command.commands.items():
                visit(f"{name} {word}", below)

    visit("benchkit", cli.cli)
    return found


COMMANDS = commands()
LEAVES = {name: command for name, command in COMMANDS.items() if not isinstance(command, click.Group)}


def options_of(command: click.Command) -> set[str]:
    """Return all spellings of a command's options."""
    own = {option for parameter in command.params if isinstance(parameter, click.Option) for option in parameter.opts}
    return own | {"--help", "-h"}


def help_of(name: str) -> str:
    """Return what ``NAME --help`` prints."""
    command = COMMANDS[name]
    return command.get_help(click.Context(command, info_name=name, **command.context_settings))


def blocks(text: str, language: str) -> list[str]:
    """Return the code blocks of one language."""
    return re.findall(rf"^```{language}\n(.*?)^```$", text, re.MULTILINE | re.DOTALL)


def calls_in(text: str) -> Iterator[str]:
    """Yield every call of benchkit in code blocks and in code within a sentence."""
    for block in blocks(text, "sh"):
        for line in block.replace("\\\n", " ").splitlines():
            for part in re.split(r"\s*(?:&&|\||;)\s*", line):
                if part.startswith("benchkit "):
                    yield part
    prose = re.sub(r"^```.*?^```$", "", text, flags=re.MULTILINE | re.DOTALL)
    for code in re.findall(r"`([^`]+)`", prose):
        if re.match(r"benchkit [a-z-]", code):
            yield code


def problem_with(call: str) -> str:
    """Return what is wrong with a call of benchkit; ``""`` if it could be typed as it stands."""
    words = shlex.split(call.partition(" > ")[0])
    command: click.Command = cli.cli
    rest = words[1:]
    while isinstance(command, click.Group) and rest and not rest[0].startswith("-"):
        below = command.commands.get(rest[0])
        if below is None:
            return "" if rest[0].isupper() else f"there is no command {rest[0]!r}"
        command, rest = below, rest[1:]
    known = options_of(command) | ({"--version"} if command is cli.cli else set())
    for word in rest:
        option = word.partition("=")[0]
        if re.fullmatch(r"--?[a-z][a-z-]*", option) and option not in known:
            return f"{command.name} has no option {option!r}"
    return ""


def test_every_call_in_the_documents_could_be_typed() -> None:
    calls = [(name, call) for name, text in DOCUMENTS.items() for call in calls_in(text)]
    assert len(calls) > 15
    assert {f"{name}: {call}": problem_with(call) for name, call in calls if problem_with(call)} == {}


@pytest.mark.parametrize(
    ("call", "words"),
    [
        ("benchkit dance", "no command 'dance'"),
        ("benchkit record burn x", "no command 'burn'"),
        ("benchkit expect tern-40 --frobnicate", "no option '--frobnicate'"),
        ("benchkit rehearse --sed=1", "no option '--sed'"),
        ("benchkit expect tern-40 --negative -15V", ""),
        ("benchkit COMMAND --help", ""),
        ("benchkit --version", ""),
    ],
)
def test_a_call_that_could_not_be_typed_is_found(call: str, words: str) -> None:
    assert words in problem_with(call)
    assert bool(words) == bool(problem_with(call))


@pytest.mark.parametrize("name", LEAVES)
def test_every_command_has_help_with_an_example_that_could_be_typed(name: str) -> None:
    text = help_of(name)
    command = LEAVES[name]
    assert len((command.help or "").strip()) > 20, "say what it does"
    _, found, after = text.partition("Example")
    assert found, f"{name} --help gives no example"
    examples = [line.strip() for line in after.splitlines() if line.strip().startswith("benchkit ")]
    assert examples
    for example in examples:
        assert example.startswith(name)
        assert problem_with(example) == ""
    for parameter in command.params:
        if isinstance(parameter, click.Option) and len(parameter.opts[0]) > len("--when"):
            assert parameter.help or parameter.metavar, f"{name} {parameter.opts[0]} says nothing"


@pytest.mark.parametrize("name", LEAVES)
def test_every_command_stands_in_the_readmes_reference_with_all_its_options(name: str) -> None:
    rows = [line for line in README.splitlines() if line.startswith(f"| `{name}` |")]
    assert len(rows) == 1
    stated = set(re.findall(r"`(--[a-z-]+)`", rows[0]))
    own = {option for option in options_of(LEAVES[name]) if option.startswith("--")} - {"--help"}
    assert stated == own


def test_the_readmes_reference_names_no_command_that_is_not_there() -> None:
    named = set(re.findall(r"^\| `(benchkit [a-z ]+)` \|", README, re.MULTILINE))
    assert named == set(LEAVES)


def test_the_readme_begins_with_the_job_and_the_two_ways_to_set_up() -> None:
    first = README.split("\n\n")[1]
    for word in ("class-AB", "output stage", "bench", "record"):
        assert word in first
    rehearsing, testing = blocks(README, "sh")[:2]
    assert rehearsing.splitlines() == [
        "python3 -m venv .venv && . .venv/bin/activate",
        "pip install .",
        "benchkit rehearse",
    ]
    assert testing.splitlines()[:2] == ["python3 -m venv .venv && . .venv/bin/activate", "pip install -e '.[dev]'"]
    assert testing.splitlines()[2].startswith("python -m pytest")


def test_the_safety_sentence_is_the_same_everywhere() -> None:
    plain = " ".join(README.replace("*", "").split())
    assert plain.count(DEFERENCE) == 2
    assert DEFERENCE in " ".join(help_of("benchkit").split()).replace("benchkit helps", "Benchkit helps")


def test_the_exit_statuses_are_those_of_the_errors() -> None:
    stated = {int(number) for number in re.findall(r"^\| (\d) \|", README, re.MULTILINE)}
    assert stated == {0, 1, 2, 3, 4, 5}
    by_kind: dict[type[errors.BenchkitError], int] = {
        errors.EntryError: 2,
        errors.FileError: 2,
        errors.RecordError: 2,
        errors.InstrumentError: 3,
        errors.BenchkitError: 5,
    }
    assert {kind: kind.exit_status for kind in by_kind} == by_kind


def test_the_files_in_the_readme_can_be_read(tmp_path: Path) -> None:
    design, procedure, bench, profile = blocks(README, "toml")
    assert parse_design(design, "README").name == "My stage"
    assert procedure_file.parse_procedure(procedure, "README").head.name == "look at the rails"
    assert set(parse_bench(bench, "README").setup) == {"meter", "supply"}
    own = tmp_path / "my-meter.toml"
    own.write_text(profile, encoding="utf-8")
    assert meter_profile(profile_table(own.name, tmp_path)).title == "my meter"


def test_what_comes_along_is_named() -> None:
    for path in (*shipped.folder().glob("*.toml"), *(shipped.folder() / "designs").glob("*.toml")):
        assert f"`{path.stem}`" in README, path.name


def test_every_profile_that_comes_along_is_named() -> None:
    for name in shipped_names():
        assert f"`{name}`" in README, name


def test_every_key_of_a_profile_is_named() -> None:
    section = README.partition("### Profiles")[2].partition("### Readings")[0]
    table = "".join(line for line in section.splitlines() if line.startswith("|"))
    parts: list[type[Part]] = [MeterProfile, SupplyProfile, LinkPart, LinePart, NumbersPart, TimingPart]
    parts += [Outputs, SupplyCommands, SupplyQuestions, Answers]
    keys = {key for part in parts for key in part.model_fields} | set(FUNCTIONS)
    assert {key for key in keys if f"`{key}`" not in table and f"`[{key}]`" not in table and key != "line"} == set()
    named = set(re.findall(r"`(\[?[a-z_]+(?:\.[a-z]+)?\]?)`", table))
    others = {"meter", "supply", "based_on", "[link.line]"}
    assert {name for name in named if name.strip("[]") not in keys and name not in others} == set()


def test_every_kind_of_step_is_named() -> None:
    for kind in get_args(procedure_file.Kind):
        assert f"`{kind}`" in README, kind
        assert f"``{kind}``" in (procedure_file.__doc__ or ""), kind


@pytest.mark.parametrize("name", DOCUMENTS)
def test_links_between_the_documents_lead_somewhere(name: str) -> None:
    for target in re.findall(r"\]\(([^)#]+)\)", DOCUMENTS[name]):
        if not target.startswith("https://"):
            assert (ROOT / target).exists(), target
    for path in re.findall(r"`((?:benchkit|tests|procedures)/[\w./-]+)`", DOCUMENTS[name]):
        assert (ROOT / path).exists(), path


def test_the_developers_page_names_every_room() -> None:
    for room in frozenset().union(*LEVELS) - {"__main__"}:
        name = f"benchkit/{room}/" if (PACKAGE / room).is_dir() else f"benchkit/{room}.py"
        assert f"`{name}`" in DEVELOPERS, room


def test_the_developers_page_gives_a_reason_for_every_dependency() -> None:
    import tomllib

    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    wanted = [*project["dependencies"], *project["optional-dependencies"]["dev"]]
    for requirement in wanted:
        name = re.split(r"[<>=!~ \[]", requirement)[0]
        assert f"| `{name}` |" in DEVELOPERS, name


def test_the_changelog_knows_this_version() -> None:
    assert "## [Unreleased]" in CHANGELOG
    assert f"## [{benchkit.__version__}]" in CHANGELOG
