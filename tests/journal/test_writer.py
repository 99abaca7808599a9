"""Appending: kept means on the disk; full disks, second writers, kill -9 at any moment."""

from __future__ import annotations

import os
import random
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import pytest

from benchkit.errors import BenchkitError, FileError, RecordError, TakenError
from benchkit.journal import Writer, read, verify

AT = "2031-04-05T06:07:08Z"


def test_lines_are_on_the_file_when_append_returns(tmp_path: Path) -> None:
    path = tmp_path / "a.jsonl"
    writer = Writer.create(path)
    for seq in (1, 2, 3):
        line = writer.append("noted", {"n": seq}, 0.5, AT)
        assert line.seq == writer.seq == seq
        assert path.read_bytes().endswith(line.raw)
    writer.close()
    writer.close()
    with pytest.raises(RecordError, match="closed"):
        writer.append("noted", {}, 0.0, AT)


def test_append_flushes_to_the_disk_before_it_returns(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The flush is the last thing done, and the whole line has been written by then."""
    writer = Writer.create(tmp_path / "a.jsonl")
    seen: list[bytes] = []
    real = os.fdatasync

    def spy(descriptor: int) -> None:
        seen.append((tmp_path / "a.jsonl").read_bytes())
        real(descriptor)

    monkeypatch.setattr(os, "fdatasync", spy)
    line = writer.append("noted", {}, 0.0, AT)
    assert seen == [line.raw]


def test_an_existing_file_is_never_overwritten(tmp_path: Path) -> None:
    path = tmp_path / "a.jsonl"
    path.write_text("mine")
    with pytest.raises(TakenError, match="already"):
        Writer.create(path)
    assert path.read_text() == "mine"


def test_two_writers_cannot_have_one_record(tmp_path: Path) -> None:
    path = tmp_path / "a.jsonl"
    with Writer.create(path) as writer:
        writer.append("noted", {}, 0.0, AT)
        with pytest.raises(RecordError, match="another process"):
            Writer.resume(path)
    Writer.resume(path).close()


def test_resume_goes_on_with_the_chain(tmp_path: Path) -> None:
    path = tmp_path / "a.jsonl"
    with Writer.create(path) as writer:
        writer.append("walk opened", {}, 0.0, AT)
    with Writer.resume(path) as writer:
        assert (writer.seq, writer.torn) == (1, "")
        writer.append("resumed", {}, 0.0, AT)
        writer.append("closed", {"count": 2}, 0.0, AT)
        with pytest.raises(RecordError, match="closed"):
            writer.append("noted", {}, 0.0, AT)
    assert verify(path).status == 0


def test_resume_cuts_a_torn_line_off_and_hands_it_over(tmp_path: Path) -> None:
    path = tmp_path / "a.jsonl"
    with Writer.create(path) as writer:
        writer.append("walk opened", {}, 0.0, AT)
        second = writer.append("noted", {"text": "µ"}, 0.0, AT)
    whole = path.read_bytes()
    for cut in range(1, len(second.raw)):
        path.write_bytes(whole[:-cut])
        with Writer.resume(path) as writer:
            assert writer.torn.encode("utf-8").startswith(b'{"seq":2'[: len(second.raw) - cut])
            assert writer.seq == 1
            assert path.read_bytes() + second.raw == whole


@pytest.mark.parametrize("kind", ["closed", "broken", "missing", "no journal"])
def test_what_cannot_be_resumed(tmp_path: Path, kind: str) -> None:
    path = tmp_path / "a.jsonl"
    if kind != "missing":
        with Writer.create(path) as writer:
            writer.append("walk opened", {}, 0.0, AT)
            writer.append("closed", {"count": 1}, 0.0, AT)
    if kind == "broken":
        path.write_bytes(path.read_bytes().replace(b"walk", b"talk"))
    if kind == "no journal":
        path.write_bytes(b"my shopping list")
    before = path.read_bytes() if path.exists() else None
    with pytest.raises(FileError):
        Writer.resume(path)
    assert (path.read_bytes() if path.exists() else None) == before


def test_a_payload_that_is_not_plain_leaves_the_file_alone(tmp_path: Path) -> None:
    with Writer.create(tmp_path / "a.jsonl") as writer:
        with pytest.raises(BenchkitError):
            writer.append("noted", {"x": float("nan")}, 0.0, AT)
        assert writer.seq == 0
        assert (tmp_path / "a.jsonl").read_bytes() == b""


def _remove_folder(path: Path) -> None:
    path.unlink()
    path.parent.rmdir()


def _replace(path: Path) -> None:
    whole = path.read_bytes()
    path.unlink()
    path.write_bytes(whole)


def _move(path: Path) -> None:
    path.rename(path.with_name("elsewhere.jsonl"))


def _add(path: Path) -> None:
    with path.open("ab") as file:
        file.write(b'{"x":1}\n')


@pytest.mark.skipif(sys.platform == "win32", reason="an open file can't be removed there")
@pytest.mark.parametrize(
    ("damage", "words"),
    [
        (lambda path: os.truncate(path, 0), "only 0 of its"),
        (lambda path: os.truncate(path, 100), "only 100 of its"),
        (_add, "somebody else has added 8 bytes"),
        (lambda path: path.unlink(), "it was removed"),
        (_remove_folder, "it was removed"),
        (_move, "it is not there any more"),
        (_replace, "another file stands in its place"),
    ],
)
def test_a_record_that_somebody_has_touched_takes_nothing_more(
    tmp_path: Path, damage: Callable[[Path], None], words: str
) -> None:
    (tmp_path / "records").mkdir()
    path = tmp_path / "records" / "a.jsonl"
    with Writer.create(path) as writer:
        writer.append("walk opened", {}, 0.0, AT)
        writer.append("noted", {}, 0.0, AT)
        damage(path)
        after = path.read_bytes() if path.exists() else None
        for _ in range(2):
            with pytest.raises(FileError, match="lost or damaged while it was written") as caught:
                writer.append("closed", {"count": 2}, 0.0, AT)
            assert words in str(caught.value)
        assert (path.read_bytes() if path.exists() else None) == after


def test_a_record_of_which_a_copy_is_linked_goes_on(tmp_path: Path) -> None:
    path = tmp_path / "a.jsonl"
    with Writer.create(path) as writer:
        writer.append("walk opened", {}, 0.0, AT)
        os.link(path, tmp_path / "backup.jsonl")
        assert writer.append("noted", {}, 0.0, AT).seq == 2


FULL_DISK = """
import resource, sys
from benchkit.errors import FileError
from benchkit.journal import Writer
writer = Writer.create(sys.argv[1])
writer.append("walk opened", {}, 0.0, "2031-04-05T06:07:08Z")
resource.setrlimit(resource.RLIMIT_FSIZE, (400, resource.RLIM_INFINITY))
try:
    writer.append("noted", {"text": "x" * 1000}, 0.0, "2031-04-05T06:07:08Z")
except FileError as error:
    print(error)
resource.setrlimit(resource.RLIMIT_FSIZE, (resource.RLIM_INFINITY, resource.RLIM_INFINITY))
print(open(sys.argv[1], "rb").read().count(b"\\n"), writer.append("noted", {}, 0.0, "2031-04-05T06:07:08Z").seq)
"""


@pytest.mark.skipif(sys.platform == "win32", reason="the limit on file sizes is a POSIX thing")
def test_a_full_disk_leaves_the_earlier_lines_and_no_torn_one(tmp_path: Path) -> None:
    """The system stops the write in the middle of the line, as a full disk does."""
    path = tmp_path / "a.jsonl"
    done = subprocess.run([sys.executable, "-c", FULL_DISK, str(path)], capture_output=True, text=True, check=True)
    said, figures = done.stdout.strip().splitlines()
    assert "could not be kept" in said
    assert "the 1 events before it are safe" in said
    assert figures == "1 2"
    assert [line.event for line in read(path).lines] == ["walk opened", "noted"]
    assert verify(path).status == 1


WRITE_ON = """
import itertools, sys
from benchkit.journal import Writer
writer = Writer.create(sys.argv[1])
for n in itertools.count(1):
    writer.append("noted", {"text": "x" * 3000}, 0.0, "2031-04-05T06:07:08Z")
    sys.stdout.write(f"{n}\\n")
    sys.stdout.flush()
"""


@pytest.mark.skipif(sys.platform == "win32", reason="SIGKILL is a POSIX thing")
@pytest.mark.parametrize("seed", range(6))
def test_kill_9_at_any_moment_loses_no_kept_event(tmp_path: Path, seed: int) -> None:
    path = tmp_path / "a.jsonl"
    process = subprocess.Popen([sys.executable, "-c", WRITE_ON, str(path)], stdout=subprocess.PIPE)
    assert process.stdout is not None
    process.stdout.readline()
    time.sleep(random.Random(seed).uniform(0.0, 0.08))
    process.send_signal(signal.SIGKILL)
    told = [1, *(int(line) for line in process.stdout.read().splitlines(keepends=True) if line.endswith(b"\n"))]
    process.stdout.close()
    process.wait()
    journal = read(path)
    assert journal.problem is None
    assert len(journal.lines) >= told[-1]
    with Writer.resume(path) as writer:
        assert writer.seq == len(journal.lines)
