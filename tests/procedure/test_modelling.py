"""What the model is asked aside, what comes of it, and the extra readings."""

from __future__ import annotations

from dataclasses import replace

import pytest

from benchkit.errors import IllegalEvent
from benchkit.events import (
    Answered,
    Closed,
    Decided,
    Judged,
    Narrowed,
    NarrowedLimits,
    OutputOff,
    ReadingMissed,
    Resumed,
    StopAsked,
    Suspected,
    TrimEnded,
    Tripped,
)
from benchkit.judge.limits import Limits
from benchkit.measure.readings import Reading
from benchkit.procedure.actions import Ask, CheckWarm, Evaluate, Narrow, Predict, Read, Suspect, Write
from benchkit.procedure.items import condition_key
from benchkit.procedure.modelling import lies_outside, with_unit
from benchkit.procedure.moves import MOST_EXTRAS
from tests.procedure.driver import OFF, Drive, begun, item_of, judged, kinds, narrowed, reading, small, suspected

CURRENT = "power.current.rail+.current"
END = "cold.end.ohm.spreader.lower"
SHORT = "cold.rails.ohm.rails"


def at_reading(item: str) -> Drive:
    drive = begun(small()).until(item)
    while not isinstance(drive.open, Read):
        drive.well()
    return drive


def failed(item: str, value: float | None = -1e9) -> Drive:
    """A walk whose reading at `item` has just failed."""
    drive = at_reading(item)
    drive.tell(reading(drive.walk.item(drive.state), value))
    drive.well()
    assert drive.state.phase == "deciding"
    return drive


def asked(drive: Drive) -> Suspect:
    action = drive.newest(Suspect)
    assert isinstance(action, Suspect)
    return action


def narrow(drive: Drive) -> Narrow:
    action = drive.newest(Narrow)
    assert isinstance(action, Narrow)
    return action


def choices(drive: Drive) -> list[str]:
    assert isinstance(drive.open, Ask)
    return [choice.value for choice in drive.open.question.choices]


def phase(drive: Drive) -> str:
    return drive.state.phase


def closed(drive: Drive) -> Closed:
    """Go to the end without answering what the model was asked."""
    while drive.state.closed is None:
        drive.well()
    return drive.state.closed


# -- narrowing ------------------------------------------------------------------------------------------------------


def test_after_each_modelled_reading_the_limits_of_those_to_come_are_asked_for() -> None:
    drive = begun(small()).until(SHORT)
    action = narrow(drive)
    assert action.item == END
    assert [one.point for one in action.known] == ["ohm.spreader.lower"]
    assert [target.point for target in action.near] == ["ohm.rails"]
    assert {target.point for target in action.later} == {"output", "rail+.current"}
    assert all(target.key and target.conditions for target in (*action.near, *action.later))
    drive.until("power.full")
    assert [type(one) for one in drive.asides] == [Narrow, Narrow, Narrow], "none after the last: nothing is to come"
    assert [len(one.known) for one in drive.asides if isinstance(one, Narrow)] == [1, 2, 3]


def test_it_stands_behind_what_is_to_be_done_next() -> None:
    drive = at_reading(END)
    drive.tell(reading(drive.walk.item(drive.state), 0.5))
    drive.well()
    assert kinds(drive.actions) == ["Predict", "Narrow"] or kinds(drive.actions) == ["Ask", "Narrow"]
    assert not drive.actions[0].aside


def test_the_answer_moves_nothing_and_may_come_anywhere() -> None:
    drive = begun(small()).until(SHORT)
    answer = narrowed(narrow(drive))
    for item in (SHORT, "limit.check", CURRENT, "bias.trim.emitter.upper.1", "made-safe.off"):
        drive.until(item)
        before = drive.state
        assert drive.tell(answer) == ()
        assert (drive.state.phase, drive.state.index, drive.state.results) == (
            before.phase, before.index, before.results,
        )  # fmt: skip
    assert drive.to_end().verdict == "pass"


def test_this_units_limits_stand_beside_the_designs_in_the_verdict() -> None:
    drive = at_reading(CURRENT)
    drive.tell(narrowed(narrow(drive), -0.2, 0.7))
    drive.tell(reading(drive.walk.item(drive.state), 0.5))
    assert isinstance(drive.open, Write)
    verdict = drive.open.event
    assert isinstance(verdict, Judged)
    assert (verdict.low, verdict.high, verdict.unit_low, verdict.unit_high) == (-10.0, 10.0, -0.2, 0.7)
    assert (verdict.verdict, verdict.odd) == ("pass", False)


def test_what_may_be_allowed_widens_this_units_limits_too_and_never_beyond_the_designs() -> None:
    walk = small()
    item = replace(item_of(walk, CURRENT), allow=0.5)
    assert item.condition is not None
    key = condition_key(item.condition)
    drive = at_reading(CURRENT)
    drive.tell(narrowed(narrow(drive), -0.2, 9.9))
    limits = walk.unit_limits_for(drive.state, item)
    assert limits is not None
    assert limits.low == pytest.approx(-0.7)
    assert limits.high == pytest.approx(10.4)
    wide = NarrowedLimits(point="rail+.current", condition=key, unit="A", low=-99.0, high=99.0)
    drive.tell(Narrowed(item=END, after=drive.state.count, limits=(wide,)))
    assert walk.unit_limits_for(drive.state, item) is None, "no narrower than the design's"


def test_one_side_may_stay_open() -> None:
    drive = at_reading(CURRENT)
    drive.tell(narrowed(narrow(drive), None, 0.2))
    limits = drive.walk.unit_limits_for(drive.state, drive.walk.item(drive.state))
    assert limits is not None
    assert (limits.low, limits.high) == (-10.0, 0.2)


def test_without_an_answer_the_designs_limits_are_all_there_is() -> None:
    drive = at_reading(CURRENT)
    drive.tell(Narrowed(item=END, after=1, problem="unsolved"))
    drive.tell(narrowed(narrow(drive), None, None))
    assert drive.walk.unit_limits_for(drive.state, drive.walk.item(drive.state)) is None
    assert drive.to_end().verdict == "pass"


def test_an_answer_from_before_a_resume_is_not_taken() -> None:
    drive = begun(small()).until(CURRENT)
    answer = narrowed(narrow(drive))
    drive.tell(answer)
    drive.tell(Resumed(operator="Ida"))
    assert drive.state.narrowed == {}
    before = drive.state
    with pytest.raises(IllegalEvent):
        drive.tell(answer)
    with pytest.raises(IllegalEvent):
        drive.tell(replace(answer, after=drive.state.count + 7))
    assert drive.state is before


# -- odd ------------------------------------------------------------------------------------------------------------


def odd(item: str = CURRENT) -> Drive:
    drive = at_reading(item)
    drive.tell(narrowed(narrow(drive), 0.9, 1.0))
    drive.tell(reading(drive.walk.item(drive.state), 0.5))
    drive.well()
    return drive


def test_a_reading_outside_this_units_limits_passes_and_is_said_to_be_odd() -> None:
    drive = odd()
    result = drive.state.result(CURRENT)
    assert result is not None
    assert (result.verdict, result.odd) == ("pass", True)
    assert "Odd for this unit" in result.why
    assert choices(drive) == ["go on", "again", "make safe"]
    assert isinstance(drive.open, Ask)
    assert "odd" in drive.open.question.title
    assert asked(drive).item == CURRENT
    drive.tell(Decided(item=CURRENT, choice="go on"))
    assert drive.state.overrides == {}, "there was nothing to override"
    assert drive.walk.item(drive.state).id == "power.full.hold"


def test_an_odd_reading_that_a_healthy_unit_explains_costs_nothing() -> None:
    drive = odd()
    drive.tell(suspected(asked(drive), "healthy", "output.upper.1: open"))
    assert choices(drive) == ["go on", "again", "make safe"], "no extra reading where nothing is suspected"
    ending = drive.to_end()
    assert (ending.verdict, ending.exit_status, ending.why) == ("pass", 0, "")


def test_a_fault_before_healthy_leaves_a_walk_undecided_whose_every_reading_passed() -> None:
    drive = odd()
    drive.tell(suspected(asked(drive), "output.upper.1: open"))
    ending = drive.to_end()
    assert (ending.verdict, ending.exit_status) == ("undecided", 1)
    assert "output.upper.1: open" in ending.why
    assert all(result.verdict == "pass" for result in drive.state.results)


def test_suspects_that_never_came_leave_it_undecided_too() -> None:
    drive = odd()
    ending = closed(drive)
    assert ending.verdict == "undecided"
    assert "had not said" in ending.why


def test_a_model_without_an_answer_changes_no_verdict() -> None:
    drive = odd()
    action = asked(drive)
    drive.tell(Suspected(item=action.item, after=action.after, problem="unsolved"))
    assert drive.to_end().verdict == "pass"


def test_an_odd_result_that_is_measured_again_and_missed_is_no_pass() -> None:
    drive = odd()
    drive.tell(Decided(item=CURRENT, choice="again"))
    drive.tell(ReadingMissed(item=CURRENT, point="rail+.current", problem="no answer"))
    assert "go on" in choices(drive)
    with pytest.raises(IllegalEvent, match="reason"):
        drive.tell(Decided(item=CURRENT, choice="go on"))


@pytest.mark.parametrize(
    ("value", "u", "outside"),
    [(1.0, 0.01, False), (1.019, 0.01, False), (1.02, 0.01, True), (-0.5, 0.01, True), (0.5, 0.01, False),
     (1.02, None, False), (None, None, True)],
)  # fmt: skip
def test_a_reading_is_outside_when_its_uncertainty_does_not_reach_back(
    value: float | None, u: float | None, outside: bool
) -> None:
    taken = Reading(
        point="output", value=value, unit="V", overload=value is None, standard_uncertainty=u, meter="m",
        function="dc volts",
    )  # fmt: skip
    assert lies_outside(taken, Limits(0.0, 1.0, None, "V", "this unit")) is outside


def test_a_failure_is_not_odd_besides() -> None:
    taken = Reading(point="output", value=9.0, unit="V", standard_uncertainty=0.1, meter="m", function="dc volts")
    verdict = replace(judged("i", "fail"), value=9.0)
    found = with_unit(verdict, taken, Limits(0.0, 1.0, None, "V", "this unit"))
    assert (found.odd, found.unit_low, found.unit_high, found.why) == (False, 0.0, 1.0, verdict.why)
    assert with_unit(verdict, taken, None) is verdict


# -- suspects -------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("item", [SHORT, CURRENT])
def test_a_failed_reading_asks_for_suspects(item: str) -> None:
    drive = failed(item)
    action = asked(drive)
    assert (action.item, action.after) == (item, drive.state.count)
    assert drive.state.suspecting == action.after
    assert action.known[-1].value == -1e9
    assert {conditions for conditions, _ in action.names} == {one.conditions for one in action.known}


def test_so_do_a_failed_rule_and_a_trim_that_is_never_reached() -> None:
    drive = begun(small()).until("power.offset")
    assert isinstance(drive.open, Evaluate)
    drive.tell(judged("power.offset", "fail"))
    assert asked(drive).item == "power.offset"
    drive = begun(small()).until("bias.trim.emitter.upper.1")
    drive.tell(TrimEnded(item="bias.trim.emitter.upper.1", problem="at its end"))
    drive.well()
    assert asked(drive).item == "bias.trim.emitter.upper.1"


@pytest.mark.parametrize("item", ["look.parts", "limit.check", "made-safe.rails-low.rail+"])
def test_what_the_model_knows_nothing_of_asks_for_none(item: str) -> None:
    drive = begun(small()).until(item)
    while drive.state.phase not in ("judging", "deciding", "switching off", "asking", "reading", "setting"):
        drive.well()
    if isinstance(drive.open, Ask):
        drive.tell(Answered(item=item, choice="no"))
        drive.well()
    elif isinstance(drive.open, Read):
        drive.tell(reading(drive.walk.item(drive.state), 30.0))
        drive.well()
    else:
        drive.tell(judged(item, "fail")) if drive.state.phase == "judging" else None
    assert not any(isinstance(action, Suspect) for action in drive.asides)


def test_what_can_be_done_after_a_failure_stays() -> None:
    assert choices(failed(CURRENT)) == ["again", "go on", "make safe"]
    assert choices(failed(SHORT)) == ["again", "make safe"]


def test_the_answer_adds_the_most_telling_reading_that_can_be_taken_now() -> None:
    drive = failed(CURRENT)
    action = asked(drive)
    points = {target.point for target in action.candidates}
    assert "spread" in points
    assert "ohm.feed.upper" not in points
    drive.tell(
        suspected(action, "output.upper.1: open", probes=["diode.output.upper.1", "spread", "output.upper.1.vbe"])
    )
    assert choices(drive) == ["again", "go on", "make safe", "probe"]
    assert isinstance(drive.open, Ask)
    assert "spread" in drive.open.question.choices[3].label, "the first one needs the power off"


def test_an_answer_that_tells_next_to_nothing_is_not_offered() -> None:
    drive = failed(CURRENT)
    drive.tell(suspected(asked(drive), "output.upper.1: open", probes=["spread"], gain_bits=0.001))
    assert "probe" not in choices(drive)


def test_a_stale_answer_is_refused() -> None:
    drive = failed(CURRENT)
    first = asked(drive)
    drive.tell(Decided(item=CURRENT, choice="again"))
    drive.tell(reading(drive.walk.item(drive.state), -2e9))
    drive.well()
    assert asked(drive).after > first.after
    before = drive.state
    with pytest.raises(IllegalEvent, match="asked for last"):
        drive.tell(suspected(first, "output.upper.1: open"))
    assert drive.state is before
    drive.tell(suspected(asked(drive), "output.upper.1: open"))
    with pytest.raises(IllegalEvent):
        drive.tell(suspected(asked(drive), "output.upper.1: open"))


def test_a_better_reading_asks_again() -> None:
    drive = failed(CURRENT)
    drive.tell(suspected(asked(drive), "output.upper.1: open"))
    drive.tell(Decided(item=CURRENT, choice="again"))
    drive.well()
    drive.well()
    assert drive.state.suspecting
    assert asked(drive).known[-1].value == 0.5
    assert drive.to_end().verdict == "pass"


# -- extra readings -------------------------------------------------------------------------------------------------


def probing(item: str = CURRENT, probe: str = "spread", value: float = 0.5) -> Drive:
    """A walk that takes the extra reading offered at a failed item, up to its verdict."""
    drive = failed(item)
    drive.tell(suspected(asked(drive), "output.upper.1: open", probes=[probe]))
    drive.tell(Decided(item=item, choice="probe"))
    while drive.state.phase != "judging":
        if isinstance(drive.open, Read):
            drive.tell(reading(drive.walk.item(drive.state), value))
        else:
            drive.well()
    return drive


def test_an_extra_reading_is_predicted_placed_read_judged_and_kept_like_any_other() -> None:
    drive = failed(CURRENT)
    drive.tell(suspected(asked(drive), "output.upper.1: open", probes=["spread"]))
    index = drive.state.index
    drive.tell(Decided(item=CURRENT, choice="probe"))
    extra = drive.walk.item(drive.state)
    assert extra.id == "power.extra-1.spread"
    assert extra.host == CURRENT
    assert isinstance(drive.open, Predict)
    assert drive.open.points == ("spread",)
    drive.well()
    assert isinstance(drive.open, Ask)
    question = drive.open.question
    assert (question.kind, question.point) == ("probes", "spread")
    assert question.red
    assert "tells them apart" in question.why
    drive.well()
    assert isinstance(drive.open, Read)
    drive.tell(reading(extra, 0.5))
    assert drive.state.index == index
    drive.well()
    result = drive.state.result(extra.id)
    assert result is not None
    assert result.verdict == "pass"
    assert (drive.state.extra, drive.state.phase) == ("", "deciding")
    again = asked(drive)
    assert again.item == CURRENT
    assert [one.point for one in again.known][-1] == "spread"
    assert "spread" not in {target.point for target in again.candidates}


def test_three_extra_readings_and_no_more() -> None:
    drive = failed(CURRENT)
    for number in range(MOST_EXTRAS):
        action = asked(drive)
        probe = next(one.point for one in action.candidates if one.point.endswith(".vbe") or one.point == "spread")
        drive.tell(suspected(action, "output.upper.1: open", probes=[probe]))
        assert "probe" in choices(drive)
        drive.tell(Decided(item=CURRENT, choice="probe"))
        while drive.state.extra:
            drive.well()
        assert len(drive.state.extras) == number + 1
    action = asked(drive)
    drive.tell(suspected(action, "output.upper.1: open", probes=[action.candidates[0].point]))
    assert "probe" not in choices(drive)
    with pytest.raises(IllegalEvent, match="offered"):
        drive.tell(Decided(item=CURRENT, choice="probe"))
    drive.tell(Decided(item=CURRENT, choice="go on", reason="known"))
    assert drive.to_end().verdict == "fail"


def test_an_extra_reading_that_fails_counts() -> None:
    drive = probing(value=-1e9)
    drive.well()
    drive.tell(suspected(asked(drive), "healthy"))
    drive.tell(Decided(item=CURRENT, choice="again"))
    assert drive.to_end().verdict == "fail"


def test_an_extra_reading_that_can_not_be_had_leads_back() -> None:
    drive = failed(CURRENT)
    drive.tell(suspected(asked(drive), "output.upper.1: open", probes=["spread"]))
    drive.tell(Decided(item=CURRENT, choice="probe"))
    while not isinstance(drive.open, Read):
        drive.well()
    drive.tell(ReadingMissed(item=drive.open.item, point="spread", problem="garbled"))
    assert (drive.state.extra, drive.state.phase, drive.state.note) == ("", "deciding", "garbled")
    assert choices(drive) == ["again", "go on", "make safe", "probe"]
    assert isinstance(drive.open, Ask)
    assert "failed" in drive.open.question.title, "the result that is decided on is still there"


@pytest.mark.parametrize(
    "event",
    [
        StopAsked(),
        Tripped(reason="r"),
        OutputOff(reason="x", confirmed=True, how="h", state=OFF),
        Resumed(operator="o"),
    ],
)
def test_whatever_stops_a_walk_stops_an_extra_reading(event: object) -> None:
    drive = probing()
    drive.tell(event)  # type: ignore[arg-type]
    assert drive.state.extra == ""
    assert drive.state.phase in ("switching off", "securing")
    assert drive.to_end().verdict == ("pass" if isinstance(event, Resumed) else "fail")
    assert drive.walk.replay(drive.told)[0] == drive.state


def test_no_extra_reading_of_a_live_board_above_sixty_volts() -> None:
    from benchkit.procedure import knowledge
    from tests.procedure.driver import shipped

    plan = shipped("tern-40")
    drive = begun(small())
    index = next(number for number, item in enumerate(plan.items) if item.id == "up.output-full.output")
    live = knowledge.powered(plan, replace(drive.state, index=index))
    assert {point.name for _, point in live} == {"rail+.current", "rail-.current"}
    low = next(number for number, item in enumerate(plan.items) if item.id == "low-rails.output-first.output")
    names = {point.name for _, point in knowledge.powered(plan, replace(drive.state, index=low))}
    assert {"spread", "output.upper.1.vbe"} <= names
    assert not names & {"rail+", "rail-", "heatsink"}


# -- on the way out -------------------------------------------------------------------------------------------------


def made_safe(*faults: str, probes: tuple[str, ...] = ("diode.output.upper.1",)) -> Drive:
    """A walk that was stopped at a failure with an unpowered reading still to be had, up to where it is offered."""
    drive = failed(CURRENT)
    drive.tell(suspected(asked(drive), *faults, probes=list(probes)))
    assert "probe" not in choices(drive)
    drive.tell(Decided(item=CURRENT, choice="make safe"))
    while drive.state.phase not in ("offering", "closing", "asking"):
        drive.well()
    return drive


def test_an_unpowered_reading_is_offered_once_the_rails_have_been_seen_low() -> None:
    drive = made_safe("output.upper.1: open")
    assert drive.state.phase == "offering"
    assert choices(drive) == ["probe", "go on"]
    for rail in ("rail+", "rail-"):
        assert drive.state.result(f"made-safe.rails-low.{rail}") is not None
    item = drive.walk.item(drive.state).id
    drive.tell(Decided(item=item, choice="probe"))
    assert not drive.walk.item(drive.state).powered
    while drive.state.extra:
        drive.well()
    assert (drive.state.phase, choices(drive)) == ("offering", ["go on"])
    action = asked(drive)
    assert action.item == CURRENT
    assert all(not hasattr(target.conditions[0], "positive_v") for target in action.candidates)
    drive.tell(suspected(action, "output.upper.1: open", probes=[action.candidates[0].point]))
    assert choices(drive) == ["probe", "go on"]
    drive.tell(Decided(item=item, choice="go on"))
    assert phase(drive) == "asking"
    assert drive.to_end().exit_status == 1


def test_it_is_not_offered_where_nothing_is_suspected_or_nothing_can_be_had() -> None:
    assert made_safe("healthy").state.phase == "asking"
    assert made_safe("output.upper.1: open", probes=()).state.phase == "asking"


def test_nor_after_the_operator_pressed_off() -> None:
    drive = failed(CURRENT)
    drive.tell(suspected(asked(drive), "output.upper.1: open", probes=["diode.output.upper.1"]))
    drive.tell(Decided(item=CURRENT, choice="go on", reason="known"))
    drive.tell(StopAsked())
    while drive.state.phase not in ("offering", "asking"):
        drive.well()
    assert drive.state.phase == "asking"


def test_other_answers_are_none_there() -> None:
    drive = made_safe("output.upper.1: open")
    item = drive.walk.item(drive.state).id
    for choice in ("again", "make safe"):
        with pytest.raises(IllegalEvent):
            drive.tell(Decided(item=item, choice=choice))


# -- a design without a warm state ----------------------------------------------------------------------------------


def warm(verdict: str) -> Drive:
    drive = begun(small()).until("look.warm-state")
    assert isinstance(drive.open, CheckWarm)
    assert drive.open.conditions
    assert all(condition.when == "warm" for condition in drive.open.conditions)
    drive.tell(replace(judged("look.warm-state", verdict), subject="warm state", why="It heats itself."))
    return drive


def test_a_design_that_comes_to_rest_is_walked() -> None:
    assert warm("pass").walk.item(warm("pass").state).id == "look.parts"


@pytest.mark.parametrize("verdict", ["fail", "undecided"])
def test_one_that_does_not_waits_for_somebody_with_a_reason(verdict: str) -> None:
    drive = warm(verdict)
    assert choices(drive) == ["again", "go on", "make safe"]
    assert isinstance(drive.open, Ask)
    assert "heats itself" in drive.open.question.do
    with pytest.raises(IllegalEvent, match="reason"):
        drive.tell(Decided(item="look.warm-state", choice="go on", reason=" "))
    drive.tell(Decided(item="look.warm-state", choice="go on", reason="only cold readings are wanted"))
    assert drive.state.overrides == {"look.warm-state": "only cold readings are wanted"}
    assert drive.walk.item(drive.state).id == "look.parts"
    assert drive.to_end().verdict == verdict
    assert not any(isinstance(action, Suspect) for action in drive.asides)


def test_or_the_walk_ends_there() -> None:
    drive = warm("fail")
    drive.tell(Decided(item="look.warm-state", choice="make safe"))
    ending = drive.to_end()
    assert ending.exit_status == 1
    assert drive.state.energised == "off"
