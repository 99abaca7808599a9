from __future__ import annotations

from pathlib import Path
from types import SimpleNamespace
from typing import Any, cast

import pytest

from benchkit.ui.walking import _say_end, resume_command


def test_the_command_that_goes_on_can_be_pasted() -> None:
    assert resume_command("rehearsal", Path("r/a.jsonl")) == "benchkit rehearse --resume r/a.jsonl"
    assert resume_command("walk", Path("r/a.jsonl")) == "benchkit walk --resume r/a.jsonl"
    assert "a b.jsonl" in resume_command("walk", Path("a b.jsonl"))


@pytest.mark.parametrize("closed", [None, object()])
def test_how_to_go_on_is_said_unless_the_walk_is_closed(
    closed: object, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    record = tmp_path / "a.jsonl"
    record.touch()
    runner = SimpleNamespace(
        last_words=lambda: "Supply off, and confirmed: read back.",
        record=record,
        session=SimpleNamespace(state=SimpleNamespace(closed=closed)),
        setting=SimpleNamespace(kind="walk"),
    )
    _say_end(cast("Any", runner))
    printed = capsys.readouterr().out
    assert f"record: {record}" in printed
    assert ("benchkit walk --resume" in printed) == (closed is None)
