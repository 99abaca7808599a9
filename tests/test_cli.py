"""The commands: help, exit statuses, and one clear sentence for whatever is wrong with what they are given."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterator
from pathlib import Path

import click
import pytest

from benchkit import __version__, cli
from benchkit.errors import BenchkitError, EntryError, InstrumentError
from benchkit.journal.locking import try_lock
from tests.procedure.driver import SHIPPED, SMALL, begun, small
from tests.record.walks import write
from tests.stage.designs import BREADBOARD

Run = Callable[..., tuple[int, str, str]]


@pytest.fixture
def run(capsys: pytest.CaptureFixture[str]) -> Run:
    def call(*arguments: object) -> tuple[int, str, str]:
        with pytest.raises(SystemExit) as caught:
            cli.main([str(argument) for argument in arguments])
        out, err = capsys.readouterr()
        assert isinstance(caught.value.code, int)
        return caught.value.code, out, err

    return call


def one_sentence(err: str) -> str:
    """No traceback, no page of text: a line that says who speaks."""
    assert "Traceback" not in err
    lines = err.strip().splitlines()
    assert len(lines) == 1, err
    assert lines[0].startswith("benchkit: ")
    return lines[0]


def leaves(group: click.Group, path: tuple[str, ...] = ()) -> Iterator[tuple[str, ...]]:
    for name, command in group.commands.items():
        if isinstance(command, click.Group):
            yield from leaves(command, (*path, name))
        else:
            yield (*path, name)


COMMANDS = list(leaves(cli.cli))


def changed(tmp_path: Path, old: str, new: str) -> Path:
    text = BREADBOARD.read_text(encoding="utf-8")
    assert text.count(old) == 1
    path = tmp_path / "mine.toml"
    path.write_text(text.replace(old, new), encoding="utf-8")
    return path


# -- help -----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("command", COMMANDS, ids=" ".join)
def test_help_with_an_example(run: Run, command: tuple[str, ...]) -> None:
    status, out, err = run(*command, "--help")
    assert (status, err) == (0, "")
    assert "Example:" in out
    assert f"benchkit {' '.join(command)}" in out


def test_the_whole_help_defers_and_names_the_statuses(run: Run) -> None:
    status, out, _ = run("--help")
    words = " ".join(out.split())
    assert status == 0
    assert "it is not a safety device, it certifies nothing" in words
    assert "3 instrument trouble" in words


def test_version(run: Run) -> None:
    status, out, _ = run("--version")
    assert status == 0
    assert __version__ in out


@pytest.mark.parametrize(
    "arguments",
    [("frobnicate",), ("check",), ("check", "tern-40", "--frob"), ("expect", "tern-40", "--units", "3"),
     ("expect", "tern-40", "--seed", "-1"), ("expect", "tern-40", "--when", "hot"), ("judge", "tern-40")],
)  # fmt: skip
def test_wrong_usage_is_wrong_input(run: Run, arguments: tuple[str, ...]) -> None:
    status, out, err = run(*arguments)
    assert (status, out) == (2, "")
    assert "Traceback" not in err
    assert "Error" in err


# -- what is wrong with a file --------------------------------------------------------------------------------------

DESIGN_CASES = [
    ('name = "Breadboard"', "name = ", ""),
    ('revision = "A"', 'revision = "A"\ncolour = "red"', "design.colour"),
    ('upper = "npn-medium"', 'upper = "npn-huge"', "npn-huge"),
    ('emitter_resistor = "4.7 ohm 1 %"', 'emitter_resistor = "0 ohm 1 %"', "output.emitter_resistor"),
    ('emitter_resistor = "4.7 ohm 1 %"', 'emitter_resistor = "4.7 V"', "output.emitter_resistor"),
    ('transistor = "npn-small"\nupper = "', 'transistor = "npn-small"\nupper = "-', "spreader.upper"),
    ("pairs = 1", "pairs = 0", "output.pairs"),
    ('value = "500 ohm 10 %"', 'value = "500 ohm -10 %"', "spreader.trimmer.value"),
    ('positive = "10 V"', 'positive = "-10 V"', "rails.positive"),
    ('tolerance = "10 %"', 'tolerance = "-10 %"', "target.tolerance"),
    ("format = 1", "format = 9", "design.format"),
]


@pytest.mark.parametrize(("old", "new", "key"), DESIGN_CASES)
@pytest.mark.parametrize("command", ["check", "expect"])
def test_a_wrong_design_names_file_and_key(
    run: Run, tmp_path: Path, command: str, old: str, new: str, key: str
) -> None:
    path = changed(tmp_path, old, new)
    status, out, err = run(command, path)
    assert (status, out) == (2, "")
    sentence = one_sentence(err)
    assert str(path) in sentence
    assert key in sentence


def test_a_target_out_of_reach(run: Run, tmp_path: Path) -> None:
    path = changed(tmp_path, 'quiescent_current = "10 mA"', 'quiescent_current = "4 A"')
    status, out, err = run("check", path)
    assert status in (1, 2)
    said = out + err
    assert "Traceback" not in said
    assert "target" in said.lower()


@pytest.mark.parametrize("command", ["check", "expect", "rehearse", "walk"])
def test_a_design_that_is_not_there(run: Run, command: str) -> None:
    arguments = ("--design", "none.toml") if command in ("rehearse", "walk") else ("none.toml",)
    status, _, err = run(command, *arguments)
    assert status == 2
    assert "none.toml" in one_sentence(err)


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ('kind = "confirm"', 'kind = "ask"', "section 'look' step 'parts' kind"),
        ('points = ["ohm.rails"]', 'points = ["ohm.rial"]', "ohm.rial"),
        (
            'points = ["output"]\nlimits = "the model"',
            'points = ["output"]\nlimits = { low = "-1 ohm", high = "1 V" }',
            "step output-first",
        ),
        ('rails = "2 V"', 'rails = "200 V"', "sets the rails to 200 V"),
        ('share = "100 %"', 'share = "110 %"', "at most 100 %"),
    ],
)
def test_a_wrong_procedure_names_file_and_step(run: Run, tmp_path: Path, old: str, new: str, words: str) -> None:
    path = tmp_path / "steps.toml"
    assert old in SMALL
    path.write_text(SMALL.replace(old, new, 1), encoding="utf-8")
    status, out, err = run("check", "breadboard", "--procedure", path)
    assert (status, out) == (2, "")
    sentence = one_sentence(err)
    assert str(path) in sentence
    assert words in sentence


def test_check_passes_what_is_shipped(run: Run) -> None:
    status, out, err = run("check", "breadboard", "--procedure", SHIPPED)
    assert (status, err) == (0, "")
    assert "Nothing to object" in out
    status, out, _ = run("check", "breadboard", "--json")
    assert status == 0
    assert json.loads(out)["findings"] == []


def test_a_wrong_bench(run: Run, tmp_path: Path) -> None:
    path = tmp_path / "bench.toml"
    path.write_text('[bench]\nformat = 1\nname = "b"\n[meter]\naddress = 7\n', encoding="utf-8")
    status, _, err = run("check", "breadboard", "--bench", path)
    assert status == 2
    assert "meter.address" in one_sentence(err)


# -- what is wrong with an entry ------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (("--positive", "fifteen"), "--positive"),
        (("--positive", "15 ohm"), "--positive"),
        (("--negative", "15V"), "negative"),
        (("--limit", "0 A"), "limit"),
        (("--limit", "nan"), "--limit"),
        (("--trimmer", "middle"), "middle"),
        (("--trimmer", "1.5"), "1.5"),
        (("--ambient", "900 degC"), "ambient"),
        (("--load", "eight"), "--load"),
        (("--load", "8 V"), "--load"),
        (("--load", "0 ohm"), "--load"),
        (("--load", "8 ohm", "--load", "4 ohm", "--load", "2 ohm"), "3 loads"),
    ],
)
def test_a_wrong_entry(run: Run, arguments: tuple[str, ...], words: str) -> None:
    status, out, err = run("expect", "breadboard", *arguments)
    assert (status, out) == (2, "")
    assert words in one_sentence(err)


def test_expect_for_people_and_for_programs(run: Run) -> None:
    status, out, _ = run("expect", "breadboard", "--units", "60", "--load", "6 ohm")
    assert status == 0
    assert max(len(line) for line in out.splitlines()) <= 80
    assert "Gain into 6 ohm" in out
    status, out, _ = run("expect", "breadboard", "--units", "60", "--json")
    found = json.loads(out)
    fixed = ["format", "design", "conditions", "units", "solved", "out_of_reach", "seed", "solve_seconds", "points"]
    assert (status, list(found)) == (0, fixed)
    full = json.loads(run("expect", "breadboard", "--units", "60", "--json", "--full", "--load", "6 ohm")[1])
    assert list(full) == [*fixed, "heat", "trimmer", "bias"]
    assert full["bias"]["loads_ohm"] == [6.0]
    assert full["points"] == found["points"]


def test_a_rail_beyond_the_designs_is_said(run: Run) -> None:
    arguments = ("expect", "tern-40", "--units", "60", "--positive", "99V")
    words = "the positive rail of 99.00 V (the design's is 35.00 V) is beyond"
    assert words in " ".join(run(*arguments)[1].split())
    status, out, err = run(*arguments, "--json")
    assert status == 0
    assert words in err
    assert json.loads(out)["conditions"]["positive_v"] == 99.0
    assert "beyond what" not in run("expect", "tern-40", "--units", "60", "--positive", "15V")[1]


@pytest.mark.parametrize("plant", ["nothing", "emitter.upper.9: open", "emitter.upper.1: tired", "emitter.upper.1"])
def test_a_fault_that_cannot_be_planted(run: Run, plant: str, tmp_path: Path) -> None:
    status, _, err = run("rehearse", "--stand-in", "--plain", "--plant", plant, "--records", tmp_path)
    assert status == 2
    assert not one_sentence(err).endswith("came.")
    assert any(words in err for words in ("Expected a part and a fault with a colon", "one of "))


def test_a_part_that_is_none_is_answered_with_the_parts(run: Run, tmp_path: Path) -> None:
    status, _, err = run("rehearse", "--stand-in", "--plain", "--plant", "frob.1: open", "--records", tmp_path)
    assert status == 2
    sentence = one_sentence(err)
    assert all(part in sentence for part in ("spreader.trimmer", "emitter.upper.1", "driver.lower"))
    assert list(tmp_path.iterdir()) == []


def test_readings_that_cannot_be_read(run: Run, tmp_path: Path) -> None:
    status, _, err = run("judge", "breadboard", tmp_path / "none.csv")
    assert status == 2
    assert "none.csv" in one_sentence(err)
    for content, words in ((b"\xff\xfe", "UTF-8"), (b"", "point"), (b"point,value,unit\noutput,many,V\n", "many"),
                           (b"point,value,unit\noutptu,1,V\n", "outptu")):  # fmt: skip
        path = tmp_path / "r.csv"
        path.write_bytes(content)
        status, out, err = run("judge", "breadboard", path)
        assert (status, out) == (2, "")
        sentence = one_sentence(err)
        assert str(path) in sentence
        assert words in sentence


SPREADS = {"healthy.csv": "1.149", "open.csv": "0.6866"}
"""What the spread of the small demonstration reads, whole and with its lower arm open."""


def _readings(tmp_path: Path) -> list[Path]:
    paths = []
    for name, volts in SPREADS.items():
        paths.append(tmp_path / name)
        paths[-1].write_text(
            "point,value,unit,positive,negative,limit,trimmer\n"
            f"spread,{volts},V,4,-4,50 mA,least\noutput,3.1 mV,V,4,-4,50 mA,least\n",
            encoding="utf-8",
        )
    return paths


def test_judging_several_files_for_programs(run: Run, tmp_path: Path) -> None:
    """One object a line, in the files' order; any file that doesn't pass decides the status."""
    paths = _readings(tmp_path)
    status, out, err = run("judge", "breadboard", *paths, "--json", "--units", "200")
    assert (status, err) == (1, "")
    lines = out.splitlines()
    assert len(lines) == len(paths)
    healthy, opened = (json.loads(line) for line in lines)
    for found in (healthy, opened):
        assert list(found) == ["verdict", "readings", "rules", "suspects", "probe_next", "unseen"]
        assert sum(one["probability"] for one in found["suspects"]) == pytest.approx(1.0)
    assert [found["readings"][0]["value"] for found in (healthy, opened)] == [float(v) for v in SPREADS.values()]
    assert (healthy["verdict"], opened["verdict"]) == ("pass", "fail")
    assert {key: healthy["suspects"][0][key] for key in ("part", "fault")} == {"part": "healthy", "fault": "none"}
    first = opened["suspects"][0]
    assert {"part": "spreader.lower", "fault": "open"} in [
        {"part": first["part"], "fault": first["fault"]}, *first["alike"],
    ]  # fmt: skip
    assert run("judge", "breadboard", paths[0], "--json", "--units", "200")[0] == 0


def test_judging_several_files_for_people(run: Run, tmp_path: Path) -> None:
    paths = _readings(tmp_path)
    status, out, _ = run("judge", "breadboard", *paths, "--units", "200")
    assert status == 1
    heads = [f"{paths[0]}: PASS", f"{paths[1]}: FAIL"]
    assert [line for line in out.splitlines() if line in heads] == heads
    assert "spreader.lower open" in out
    assert out.count("Not tested") == 2


def test_one_wrong_file_among_several_judges_none(run: Run, tmp_path: Path) -> None:
    paths = _readings(tmp_path)
    paths[1].write_text("point,value,unit\nspread,many,V\n", encoding="utf-8")
    status, out, err = run("judge", "breadboard", *paths, "--json")
    assert (status, out) == (2, "")
    assert str(paths[1]) in one_sentence(err)


# -- records --------------------------------------------------------------------------------------------------------


def test_verify_has_statuses_of_its_own(run: Run, tmp_path: Path) -> None:
    drive = begun(small())
    drive.to_end()
    path = write(tmp_path / "a.jsonl", [event for event, _ in drive.told])
    assert run("record", "verify", path)[0] == 0
    whole = path.read_bytes()
    path.write_bytes(whole[:-3])
    status, out, _ = run("record", "verify", path)
    assert status == 1
    assert str(len(drive.told)) in out
    path.write_bytes(whole.replace(b"Mara", b"Nara", 1))
    assert run("record", "verify", path)[0] == 2


def test_one_record_that_cannot_be_read_keeps_none_from_being_verified(run: Run, tmp_path: Path) -> None:
    drive = begun(small())
    drive.to_end()
    good = write(tmp_path / "a.jsonl", [event for event, _ in drive.told])
    for order in ((good, tmp_path / "nope"), (tmp_path / "nope", good)):
        status, out, err = run("record", "verify", *order)
        assert status == 2
        assert f"{good}: whole" in out
        assert "nope" in one_sentence(err)


@pytest.mark.parametrize("command", ["rehearse", "walk"])
def test_a_record_in_use_is_refused_before_anything_is_said(run: Run, tmp_path: Path, command: str) -> None:
    drive = begun(small()).until("power.full")
    path = write(tmp_path / "a.jsonl", [event for event, _ in drive.told])
    with path.open("rb") as held:
        assert try_lock(held.fileno())
        status, out, err = run(command, "--plain", "--resume", path)
    assert (status, out) == (2, "")
    assert "another process is writing this record" in one_sentence(err)


@pytest.mark.parametrize("command", ["show", "table"])
def test_a_record_that_is_none(run: Run, tmp_path: Path, command: str) -> None:
    path = tmp_path / "x.jsonl"
    path.write_text("hello\n")
    status, _, err = run("record", command, path)
    assert status == 2
    assert str(path) in one_sentence(err)


@pytest.mark.parametrize("command", ["rehearse", "walk"])
def test_what_cannot_be_resumed(run: Run, tmp_path: Path, command: str) -> None:
    status, _, err = run(command, "--resume", tmp_path / "none.jsonl")
    assert status == 2
    assert "none.jsonl" in one_sentence(err)


def test_a_real_walk_is_not_gone_on_with_as_a_rehearsal(run: Run, tmp_path: Path) -> None:
    drive = begun(small()).until("power.full")
    path = write(tmp_path / "a.jsonl", [event for event, _ in drive.told])
    status, _, err = run("rehearse", "--resume", path)
    assert status == 2
    assert "real walk" in one_sentence(err)


# -- statuses of what goes wrong inside -----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("error", "status", "words"),
    [
        (EntryError("'x' came", "a number"), 2, "Expected a number."),
        (InstrumentError("timeout", "No answer"), 3, "No answer."),
        (BenchkitError("Something of ours"), 5, "Something of ours."),
        (ZeroDivisionError("division by zero"), 5, "an error of benchkit's own: ZeroDivisionError"),
        (KeyboardInterrupt(), 4, "Stopped"),
        (click.Abort(), 4, "Stopped at the prompt"),
    ],
)
def test_each_error_has_its_status(
    run: Run, monkeypatch: pytest.MonkeyPatch, tmp_path: Path, error: BaseException, status: int, words: str
) -> None:
    import tempfile

    from benchkit import shipped

    def fail(name: str) -> Path:
        raise error

    monkeypatch.setattr(shipped, "find_design", fail)
    monkeypatch.setattr(tempfile, "tempdir", str(tmp_path))
    found, out, err = run("check", "tern-40")
    assert (found, out) == (status, "")
    assert words in err
    assert "Traceback" not in err
    kept = list(tmp_path.iterdir())
    assert len(kept) == (1 if isinstance(error, ZeroDivisionError) else 0)
    if kept:
        assert "Traceback" in kept[0].read_text()
        assert str(kept[0]) in err


def test_a_reader_that_has_left_is_no_error(run: Run, monkeypatch: pytest.MonkeyPatch) -> None:
    from benchkit import shipped

    def fail(name: str) -> Path:
        raise BrokenPipeError

    monkeypatch.setattr(shipped, "find_design", fail)
    assert run("check", "tern-40")[0] == 0


def test_full_is_no_word_of_its_own(run: Run) -> None:
    status, _, err = run("expect", "breadboard", "--full")
    assert status == 2
    assert "--full came without --json" in one_sentence(err)


def test_a_design_without_a_trimmer_can_be_checked(run: Run, tmp_path: Path) -> None:
    text = BREADBOARD.read_text(encoding="utf-8")
    design = changed(tmp_path, text[text.index("[spreader.trimmer]") : text.index("[output]")], "")
    status, out, _ = run("check", design, "--json")
    assert status in (0, 1)
    assert json.loads(out)["items"] > 40
