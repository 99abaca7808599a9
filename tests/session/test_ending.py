from __future__ import annotations

import pytest

from benchkit.events import Closed, Noted
from benchkit.procedure.file import parse_procedure
from benchkit.session.ending import time_note
from tests.procedure.driver import SMALL
from tests.session.fakes import Run, quick_predictions


def test_a_channels_time_in_words_and_figures() -> None:
    noted = time_note(192.0, 300.0)
    assert noted is not None
    assert noted.text == "This channel took 3 min 12 s; the target is 5 min."
    assert noted.figures == {"seconds": 192.0, "target_seconds": 300.0}
    assert time_note(192.0, None) is None


def test_it_stands_before_the_last_line(monkeypatch: pytest.MonkeyPatch) -> None:
    quick_predictions(monkeypatch)
    timed = SMALL.replace('name = "Small"\n', 'name = "Small"\ntarget_time = "5 min"\n', 1)
    run = Run()
    make = run.make

    def made() -> object:
        session = make()
        session.job.procedure = parse_procedure(timed, "small.toml")
        return session

    monkeypatch.setattr(run, "make", made)
    closed = run.go()
    notes = [event for event in run.keeper.kept if isinstance(event, Noted) and event.text.startswith("This channel")]
    assert len(notes) == 1
    assert notes[0].figures["target_seconds"] == 300.0
    assert notes[0].figures["seconds"] == pytest.approx(run.bench.seconds, abs=2.0)
    assert isinstance(run.keeper.kept[-1], Closed)
    assert closed.count == len(run.keeper.kept) - 1
