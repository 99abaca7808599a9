"""The traffic log: bounded in memory and on the disk, printable whatever went over the line."""

from __future__ import annotations

from pathlib import Path

import pytest

from benchkit.instruments import traffic
from benchkit.instruments.traffic import TrafficLog


def test_two_bounded_files(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(traffic, "FILE_BYTES", 2000)
    log = TrafficLog(tmp_path / "traffic.log")
    for number in range(200):
        log.note("the meter", "got", f"{number} \x1b[2J\xb5\n".encode("latin-1"), 0.0012)
    log.close()
    files = sorted(tmp_path.iterdir())
    assert [file.name for file in files] == ["traffic.log", "traffic.log.1"]
    for file in files:
        assert file.stat().st_size <= 2000
        assert all(line.isprintable() for line in file.read_text("ascii").splitlines())
    assert "the meter got '199 \\x1b[2J\\xb5\\n' after 1.2 ms" in log.entries()[-1]


def test_memory_is_bounded() -> None:
    log = TrafficLog()
    for number in range(2000):
        log.note("x", f"{number}")
    assert len(log.entries()) == traffic.KEPT_ENTRIES
    assert log.entries()[-1].endswith("1999")
