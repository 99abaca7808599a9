"""Long messages come part by part, and nothing of them is lost."""

from __future__ import annotations

import re

import pytest

from benchkit.ui.widgets.message_line import ROW_S, MessageLine, rows_of

LONG = "The supply did not answer twice and was asked a third time: +34.98 V and -35.02 V are read back where " * 3


@pytest.mark.parametrize("most", [1, 2, 3])
@pytest.mark.parametrize("width", [38, 78, 118])
def test_all_of_a_message_is_shown_and_each_part_fits(width: int, most: int) -> None:
    parts = rows_of(LONG, width, most)
    rows = [row for part in parts for row in part.split("\n")]
    assert all(len(row) <= width for row in rows) or len(parts) == 1
    assert all(part.count("\n") < most for part in parts)
    shown = " ".join(re.sub(r"^\d+/\d+ ", "", part) for part in parts)
    assert shown.split() == LONG.split()


def test_the_parts_follow_one_another_and_a_new_message_begins_at_its_first() -> None:
    now = [0.0]
    line = MessageLine(clock=lambda: now[0])
    seen = []
    for _ in rows_of(LONG, 78, 1):
        line.put(LONG, 78, 1)
        seen.append(str(line.content))
        now[0] += ROW_S
    assert tuple(seen) == rows_of(LONG, 78, 1)
    now[0] += ROW_S
    line.put("Short.", 78, 1)
    assert str(line.content) == "Short."
    line.put("", 78, 1)
    assert line.has_class("empty")
