"""The garbage collector leaves out what was there before somebody watches a reading, and sees all of it again later."""

from __future__ import annotations

import gc

from benchkit.ui import memory


def test_what_is_there_is_left_out_of_rounds_and_comes_back_at_the_end() -> None:
    before = gc.get_freeze_count()
    try:
        memory.begin()
        assert gc.get_freeze_count() > 1000
        rings: list[list[object]] = [[] for _ in range(500)]
        for ring in rings:
            ring.append(ring)
        held = gc.get_freeze_count()
        memory.hold()
        assert gc.get_freeze_count() >= held + 500
    finally:
        memory.end()
    assert gc.get_freeze_count() <= before
