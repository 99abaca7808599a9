"""A reading just outside the model's limits in a walk: undecided by itself, decided by all readings together."""

from __future__ import annotations

import pytest

from benchkit.events import Closed, Decided, Judged
from benchkit.judge.rare import RARE_SHARE
from benchkit.procedure.actions import Ask, Suspect
from tests.procedure.driver import Drive, reading, suspected
from tests.procedure.test_modelling import END, SHORT, at_reading, choices

CURRENT = "power.current.rail+.current"


def just_outside(drive: Drive, *, times: float = 0.5) -> Judged:
    """Read the open item `times` the rare share above its upper limit; return the verdict."""
    item = drive.walk.item(drive.state)
    limits = drive.walk.limits_for(drive.state, item)
    assert limits is not None
    assert limits.low is not None
    assert limits.high is not None
    spare = RARE_SHARE * (limits.high - limits.low) / 2.0
    drive.tell(reading(item, limits.high + times * spare))
    verdict = drive.well()
    assert isinstance(verdict, Judged)
    return verdict


def passed_over(*items: str) -> Drive:
    """A walk with a rare reading at each of the items, gone on from without a reason."""
    drive = at_reading(items[0])
    for number, item in enumerate(items):
        if number:
            drive.until(item)
            while drive.state.phase != "reading":
                drive.well()
        just_outside(drive)
        drive.tell(Decided(item=item, choice="go on"))
    return drive


def to_the_way_out(drive: Drive) -> Suspect:
    while not drive.walk.way_out(drive.state):
        drive.well()
    newest = drive.newest(Suspect)
    assert isinstance(newest, Suspect)
    return newest


def closed(drive: Drive) -> Closed:
    while drive.state.closed is None:
        drive.well()
    return drive.state.closed


@pytest.mark.parametrize("item", [CURRENT, END, SHORT])
def test_it_is_undecided_and_can_be_gone_on_from_even_where_nothing_else_can(item: str) -> None:
    drive = at_reading(item)
    verdict = just_outside(drive)
    assert (verdict.verdict, verdict.rare) == ("undecided", True)
    assert verdict.why.endswith("It is so near that a good unit may read it.")
    assert choices(drive)[:2] == ["again", "go on"]
    assert isinstance(drive.open, Ask)
    assert not drive.open.question.choices[1].wants_reason
    assert drive.newest(Suspect).item == item
    drive.tell(Decided(item=item, choice="go on"))
    assert drive.walk.item(drive.state).id != item


@pytest.mark.parametrize("item", [CURRENT, END, SHORT])
def test_farther_out_it_fails_as_ever(item: str) -> None:
    drive = at_reading(item)
    verdict = just_outside(drive, times=1.1)
    assert (verdict.verdict, verdict.rare) == ("fail", False)


def test_when_all_readings_fit_a_good_unit_it_does_not_keep_it_from_passing() -> None:
    drive = passed_over(CURRENT)
    drive.tell(suspected(to_the_way_out(drive), "healthy", "driver.upper: leaky"))
    end = closed(drive)
    assert (end.verdict, end.exit_status) == ("pass", 0)
    assert end.why == (
        "rail+.current read just outside the limits of 99.73 % of good units; all readings together fit a good one."
    )


def test_what_the_model_said_before_the_last_reading_does_not_count() -> None:
    drive = at_reading(CURRENT)
    just_outside(drive)
    early = drive.newest(Suspect)
    assert isinstance(early, Suspect)
    drive.tell(suspected(early, "healthy"))
    drive.tell(Decided(item=CURRENT, choice="go on"))
    to_the_way_out(drive)
    assert closed(drive).verdict == "undecided"


@pytest.mark.parametrize("say", ["a fault first", "nothing explains it", "nothing"])
def test_otherwise_the_walk_ends_undecided(say: str) -> None:
    drive = passed_over(CURRENT)
    asked = to_the_way_out(drive)
    if say == "a fault first":
        drive.tell(suspected(asked, "driver.upper: leaky", "healthy"))
    elif say == "nothing explains it":
        drive.tell(suspected(asked, "healthy", explained=False))
    assert closed(drive).verdict == "undecided"


def test_more_than_a_few_are_too_many(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("benchkit.procedure.closing.MOST_RARE", 2)
    drive = passed_over(END, SHORT, CURRENT)
    drive.tell(suspected(to_the_way_out(drive), "healthy"))
    assert closed(drive).verdict == "undecided"
