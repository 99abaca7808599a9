"""Sections that may be left out, parts that were replaced, the way back to a trim, waits for a reading to settle."""

from __future__ import annotations

from functools import cache
from typing import Any

import pytest

from benchkit import quantities
from benchkit.errors import IllegalEvent
from benchkit.events import Answered, Decided, PartsReplaced, Waited
from benchkit.procedure import knowledge
from benchkit.procedure.actions import Ask, Narrow, Read, Suspect, Trim, Wait
from benchkit.procedure.file import load_procedure, parse_procedure
from benchkit.procedure.items import Plan, condition_key
from benchkit.procedure.moves import MOST_TRIMS_AGAIN
from benchkit.procedure.plan import make_plan
from benchkit.procedure.sizing import supply_limit_a
from benchkit.procedure.walk import Walk
from benchkit.shipped import find_procedure
from tests.procedure.driver import SMALL, Drive, begun, good, item_of, judged, narrowed, reading, suspected
from tests.stage.designs import breadboard

AGAIN = """
[[section.step]]
name = "soak-long"
kind = "wait"
title = "Soak"
seconds = "300 s"
until = "settled"
at_least = "20 s"
drift = "3 %/min"
[[section.step]]
name = "target"
kind = "measure"
title = "Target"
points = ["emitter.upper.1"]
limits = "the target"
trim_again = "trim"

[[section]]
name = "more"
title = "More"
optional = "Is more wanted, with {load}?"
[[section.step]]
name = "look"
kind = "confirm"
title = "Look"
do = "Is it so?"
[[section.step]]
name = "currents"
kind = "measure"
title = "Driven"
points = ["rail+.current"]
limits = { low = "-10 mA" }
state = "driven"

[[section]]
name = "made-safe"
"""
TEXT = SMALL.replace('[[section]]\nname = "made-safe"\n', AGAIN.lstrip("\n"), 1)


@cache
def small_again() -> Walk:
    return Walk(make_plan(parse_procedure(TEXT, "again.toml"), breadboard()))


@cache
def shipped_as(name: str) -> Plan:
    return make_plan(load_procedure(find_procedure(name)), breadboard())


@cache
def repair() -> Walk:
    return Walk(shipped_as("re-bias"))


TARGET = "bias.target.emitter.upper.1"
TRIM = "bias.trim.emitter.upper.1"


def fail(drive: Drive) -> None:
    """Read the target far below its limits."""
    drive.until(TARGET)
    while not isinstance(drive.open, Read):
        drive.well()
    drive.tell(reading(item_of(drive.walk, TARGET), 1e-3))
    drive.well()
    assert drive.state.phase == "deciding"


def choices(drive: Drive) -> list[str]:
    assert isinstance(drive.open, Ask)
    return [choice.value for choice in drive.open.question.choices]


# -- back to the trim -----------------------------------------------------------------------------------------------


def test_a_target_that_is_missed_leads_back_to_its_trim_three_times() -> None:
    drive = begun(small_again())
    for _ in range(MOST_TRIMS_AGAIN):
        fail(drive)
        assert choices(drive)[0] == "trim again"
        assert not drive.state.suspecting, "a bias that has moved is no fault yet"
        drive.tell(Decided(item=TARGET, choice="trim again"))
        assert drive.walk.item(drive.state).id == TRIM
        assert isinstance(drive.open, Trim)
        assert TARGET not in drive.state.readings, "it is no longer how the unit stands"
    fail(drive)
    assert "trim again" not in choices(drive)
    assert drive.state.suspecting
    with pytest.raises(IllegalEvent, match="trim"):
        drive.tell(Decided(item=TARGET, choice="trim again"))


def test_after_a_trim_that_holds_the_walk_passes() -> None:
    drive = begun(small_again())
    fail(drive)
    drive.tell(Decided(item=TARGET, choice="trim again"))
    assert drive.to_end().verdict == "pass"
    assert drive.walk.replay(drive.told) == (drive.state, ())


def test_a_result_that_passed_or_is_missing_leads_nowhere_back() -> None:
    drive = begun(small_again()).until(TARGET)
    drive.well()
    passed = drive.state
    assert passed.results[-1].item == TARGET or drive.walk.item(passed).id == TARGET
    for item in drive.walk.plan.items:
        if item.id != TARGET:
            assert not item.back
    other = begun(small_again()).until("power.output-first.output")
    while not isinstance(other.open, Read):
        other.well()
    other.tell(reading(item_of(other.walk, "power.output-first.output"), 1e9))
    other.well()
    assert "trim again" not in choices(other)


def test_a_trim_says_where_it_happens() -> None:
    drive = begun(small_again()).until(TRIM)
    assert isinstance(drive.open, Trim)
    assert drive.open.share == 1.0
    assert drive.open.condition is not None
    assert drive.open.condition.trimmer == "target"
    assert drive.open.condition.positive_v == breadboard().rails.positive_v


# -- waits ------------------------------------------------------------------------------------------------------------


def test_a_wait_until_settled_says_what_is_watched_and_how_still_it_has_to_be() -> None:
    drive = begun(small_again()).until("bias.soak-long")
    wait = drive.open
    assert isinstance(wait, Wait)
    assert (wait.point, wait.function, wait.unit) == ("emitter.upper.1", "dc volts", "V")
    assert wait.until_settled
    assert (wait.seconds, wait.least_s) == (300.0, 20.0)
    assert wait.target == pytest.approx(47e-3)
    assert wait.drift_limit == pytest.approx(0.03 * 47e-3 / 60.0)
    assert (wait.low, wait.high) == (item_of(drive.walk, TARGET).limits.low, item_of(drive.walk, TARGET).limits.high)  # type: ignore[union-attr]


def test_a_wait_that_came_to_no_rest_is_said_and_passed() -> None:
    drive = begun(small_again()).until("bias.soak-long")
    drive.tell(Waited(item="bias.soak-long", seconds=300.0, settled=False, point="emitter.upper.1"))
    assert drive.walk.item(drive.state).id == TARGET
    assert "had not come to rest after 5.0 min" in drive.state.note


# -- a section that is chosen ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("wanted", [False, True])
def test_an_optional_section_is_done_when_it_is_chosen(wanted: bool) -> None:
    drive = begun(small_again()).until("more.choose")
    assert choices(drive) == ["no", "yes", "make safe"]
    assert isinstance(drive.open, Ask)
    assert "8.0 ohm" in drive.open.question.do or "8" in drive.open.question.do
    drive.tell(Answered(item="more.choose", choice="yes" if wanted else "no"))
    assert drive.walk.item(drive.state).id == ("more.look" if wanted else "made-safe.off")
    assert drive.to_end().verdict == "pass"
    results = {result.item for result in drive.state.results}
    assert ("more.look" in results) == wanted
    assert drive.walk.replay(drive.told) == (drive.state, ())


def test_what_was_chosen_can_be_left_out_the_second_time() -> None:
    drive = begun(small_again())
    fail(drive)
    drive.tell(Decided(item=TARGET, choice="go on", reason="later"))
    drive.tell(Answered(item="more.choose", choice="yes"))
    assert drive.state.chosen == {"more"}
    assert not drive.state.leaves_out(item_of(drive.walk, "more.look"))


def test_a_driven_reading_is_nothing_that_the_model_knows() -> None:
    drive = begun(small_again()).until("more.choose")
    drive.tell(Answered(item="more.choose", choice="yes"))
    before = knowledge.observations(drive.walk.plan, drive.state)
    drive.to_end()
    item = item_of(drive.walk, "more.currents.rail+.current")
    assert item.driven
    assert item.id in drive.state.readings
    assert knowledge.observations(drive.walk.plan, drive.state) == before


# -- parts replaced -------------------------------------------------------------------------------------------------


def walked(walk: Walk, before: tuple[str, bool], now: tuple[str, bool]) -> Drive:
    """Walk to the end with these answers to both questions about parts."""
    drive = begun(walk)
    answers: dict[str, Any] = {"look.before": before, "repair.replaced": now}
    for _ in range(600):
        if drive.state.closed is not None:
            return drive
        assert drive.open is not None
        event = good(drive.walk, drive.state, drive.open)
        if isinstance(event, PartsReplaced):
            parts, semiconductors = answers[event.item]
            event = PartsReplaced(item=event.item, parts=parts, semiconductors=semiconductors)
        if drive.state.phase == "closing" and drive.state.suspecting:
            asked = drive.newest(Suspect)
            assert isinstance(asked, Suspect)
            drive.tell(suspected(asked, "healthy"))
        drive.tell(event)
    raise AssertionError("the walk doesn't end")


NOTHING = ("", False)
RESISTOR = ("emitter.upper.1", False)
DEVICES = ("output.upper.1, output.lower.1", True)


@pytest.mark.parametrize(
    ("before", "now", "sections"),
    [
        (NOTHING, NOTHING, {"found"}),
        (RESISTOR, NOTHING, {"again", "careful"}),
        (NOTHING, RESISTOR, {"found", "again", "careful"}),
        (NOTHING, DEVICES, {"found", "again", "careful"}),
        (DEVICES, NOTHING, {"again", "careful"}),
    ],
)
def test_what_was_replaced_decides_which_sections_are_walked(
    before: tuple[str, bool], now: tuple[str, bool], sections: set[str]
) -> None:
    drive = walked(repair(), before, now)
    done = {item.section for item in repair().plan.items if drive.state.result(item.id) is not None}
    assert done & {"found", "again", "careful"} == sections
    assert drive.state.closed is not None
    assert drive.state.closed.verdict == "pass"
    assert drive.state.semiconductors == (before[1] or now[1])
    assert drive.walk.replay(drive.told) == (drive.state, ())


@pytest.mark.parametrize("parts", [DEVICES, RESISTOR, ("spreader.trimmer", False)])
def test_with_new_parts_the_trimmer_is_at_its_end_before_there_is_power(parts: tuple[str, bool]) -> None:
    drive = walked(repair(), NOTHING, parts)
    order = [result.item for result in drive.state.results]
    end = next(number for number, name in enumerate(order) if name.startswith("careful.trimmer-end"))
    assert end < order.index("careful.on")
    assert drive.walk.plan.items[0].id == "bench"
    on = item_of(repair(), "careful.on")
    full = breadboard().rails
    assert on.limit_a < supply_limit_a(breadboard(), full.positive_v, full.negative_v, share=1.0)


def test_what_was_read_before_parts_were_replaced_tells_of_another_unit() -> None:
    drive = begun(repair()).until("repair.replaced")
    known = knowledge.observations(drive.walk.plan, drive.state)
    assert known
    count = drive.state.count
    drive.tell(PartsReplaced(item="repair.replaced", parts="emitter.upper.1", semiconductors=False))
    assert knowledge.observations(drive.walk.plan, drive.state) == ()
    assert drive.state.resumed_at == count + 1, "what the model was asked before lapses"
    assert drive.state.parts == "emitter.upper.1"


LOWER = "found.drops.emitter.lower.1"


def failed_as_found() -> Drive:
    """A walk with a drop that is far too high as found."""
    drive = begun(repair()).until(LOWER)
    while not isinstance(drive.open, Read):
        drive.well()
    drive.tell(reading(item_of(repair(), LOWER), 1e6))
    drive.well()
    return drive


@pytest.mark.parametrize(("parts", "verdict"), [(NOTHING, "fail"), (RESISTOR, "pass")])
def test_a_failure_that_was_found_counts_until_it_is_repaired(parts: tuple[str, bool], verdict: str) -> None:
    drive, name = failed_as_found(), LOWER
    asked = drive.newest(Suspect)
    assert isinstance(asked, Suspect), "what was found wrong has suspects by itself"
    drive.tell(suspected(asked, "emitter.lower.1: open"))
    drive.tell(Decided(item=name, choice="go on", reason="found so"))
    drive.until("repair.replaced")
    drive.tell(PartsReplaced(item="repair.replaced", parts=parts[0], semiconductors=parts[1]))
    closed = drive.to_end()
    assert closed.verdict == verdict
    assert (drive.state.suspicion is None) == bool(parts[0])


@pytest.mark.parametrize(("parts", "verdict"), [(NOTHING, "fail"), (RESISTOR, "pass")])
def test_an_extra_reading_that_was_found_counts_no_longer_than_its_item(parts: tuple[str, bool], verdict: str) -> None:
    drive, name = failed_as_found(), LOWER
    asked = drive.newest(Suspect)
    assert isinstance(asked, Suspect)
    drive.tell(suspected(asked, "emitter.lower.1: open", probes=["output.upper.1.vbe"]))
    drive.tell(Decided(item=name, choice="probe"))
    while not isinstance(drive.open, Read):
        drive.well()
    drive.tell(reading(drive.walk.item(drive.state), -1e9))
    drive.well()
    assert [result.verdict for result in drive.state.results[-2:]] == ["fail", "fail"]
    asked = drive.newest(Suspect)
    assert isinstance(asked, Suspect)
    drive.tell(suspected(asked, "healthy"))
    drive.tell(Decided(item=name, choice="go on", reason="found so"))
    drive.until("repair.replaced")
    drive.tell(PartsReplaced(item="repair.replaced", parts=parts[0], semiconductors=parts[1]))
    assert drive.to_end().verdict == verdict


@pytest.mark.parametrize(
    ("event", "said"),
    [
        (PartsReplaced(item="look.before", parts=" ", semiconductors=True), "nobody named"),
        (Answered(item="look.before", choice="done"), "which parts"),
    ],
)
def test_an_answer_about_parts_has_to_be_one(event: Any, said: str) -> None:
    drive = begun(repair()).until("look.before")
    with pytest.raises(IllegalEvent) as caught:
        drive.tell(event)
    assert said in str(caught.value)


def test_nobody_says_elsewhere_that_parts_were_replaced() -> None:
    drive = begun(repair()).until("look.parts")
    with pytest.raises(IllegalEvent, match="replaced"):
        drive.tell(PartsReplaced(item="look.parts", parts="x", semiconductors=False))


def test_without_a_least_end_behind_it_the_trimmer_is_where_it_was_found() -> None:
    plan = repair().plan
    drive = begun(repair()).until("found.currents.rail+.current")
    assert knowledge.trimmer_now(plan, drive.state.index, drive.state) == "unknown"
    number = next(number for number, item in enumerate(plan.items) if item.id == "bias.more-current")
    assert knowledge.trimmer_now(plan, number, drive.state) == "unknown", "the careful section was left out"


def test_what_was_read_with_the_trimmer_as_found_counts_until_it_is_turned() -> None:
    plan = repair().plan

    def known(drive: Drive) -> set[tuple[str, bool]]:
        seen = knowledge.observations(plan, drive.state)
        return {(one.point, all(condition.trimmer == "unknown" for condition in one.conditions)) for one in seen}

    before = known(begun(repair()).until("bias.pre-set.emitter.upper.1"))
    assert ("ohm.emitter.upper.1", True) in before
    assert ("emitter.lower.1", True) not in before, "the screw is being turned"
    found = known(begun(repair()).until("found.off"))
    assert {("emitter.lower.1", True), ("spread", True), ("ohm.emitter.upper.1", True)} <= found


def test_a_stage_whose_reading_has_come_to_rest_is_still_on_its_way_to_warm() -> None:
    plan = repair().plan
    for item in plan.items:
        if item.section == "left" and item.kind == "measure" and item.point is not None and item.point.modelled:
            under = knowledge.model_condition(item)
            assert under is item.told_under
            assert [one.when for one in under.conditions] == ["cold", "warm"]  # type: ignore[union-attr]
            assert {one.trimmer for one in under.conditions} == {"unknown"}  # type: ignore[union-attr]
    spread = item_of(repair(), "left.spread.spread").condition
    assert {one.when for one in spread.conditions} == {"cold", "warm"}  # type: ignore[union-attr]
    assert {one.trimmer for one in spread.conditions} == {"target"}  # type: ignore[union-attr]


def test_narrowed_limits_are_asked_and_kept_under_what_the_model_is_told() -> None:
    drive = begun(repair()).until("left.drops.emitter.lower.1")
    asked = drive.newest(Narrow)
    assert isinstance(asked, Narrow)
    under = item_of(repair(), "left.spread.spread").told_under
    assert under is not None
    assert {target.key for target in asked.near} == {condition_key(under)}
    drive.tell(narrowed(asked, -5.0, 5.0))
    drive.until("left.spread.spread")
    while drive.state.phase == "predicting":
        drive.well()
    assert repair().unit_limits_for(drive.state, item_of(repair(), "left.spread.spread")) is not None


def retaken(plan: Plan, item: str) -> list[str]:
    points = {one.id: one.point for one in plan.items}
    rule = next(one for one in plan.items if one.id == item)
    return [point.name for name in rule.retake if (point := points[name]) is not None]


def test_what_a_rule_judged_can_be_read_again() -> None:
    plan = shipped_as("production-trim")
    assert retaken(plan, "warm.hum-rule") == ["output.ac"]
    assert retaken(plan, "warm.symmetry-rule") == ["emitter.lower.1"], "the clips were on the upper one"
    assert retaken(plan, "power.offset-rule") == ["output"]

    drive = begun(Walk(plan)).until("warm.hum-rule")
    drive.tell(judged("warm.hum-rule", "fail"))
    assert choices(drive)[0] == "read again"
    assert "again" not in choices(drive), "the same readings would be judged the same"
    drive.tell(Decided(item="warm.hum-rule", choice="read again"))
    quiet = drive.walk.item(drive.state).id
    assert quiet == "warm.quiet.output.ac"
    assert quiet not in drive.state.readings
    assert drive.until("driven.choose").state.result("warm.hum-rule").verdict == "pass"  # type: ignore[union-attr]
    assert drive.walk.replay(drive.told)[0] == drive.state


def test_what_was_read_between_is_kept() -> None:
    plan = shipped_as("first-power-on")
    rule = "low-rails.stiffness-rule"
    assert retaken(plan, rule) == ["spread.upper", "spread.lower"]
    drive = begun(Walk(plan)).until(rule)
    before = dict(drive.state.readings)
    drive.tell(judged(rule, "undecided"))
    drive.tell(Decided(item=rule, choice="read again"))
    dropped = {f"low-rails.spread.{point}" for point in retaken(plan, rule)}
    assert before.keys() - drive.state.readings.keys() == dropped
    asked = len(drive.asked)
    drive.until(rule)
    reads = [action.point for action in drive.asked[asked:] if isinstance(action, Read)]
    assert reads == ["spread.upper", "spread.lower"]
    assert drive.until("low-rails.fail-safe-rule").state.result(rule).verdict == "pass"  # type: ignore[union-attr]


def test_before_power_the_limit_is_the_one_that_was_checked() -> None:
    plan = shipped_as("re-bias")
    checked = next(item for item in plan.items if item.kind == "limit check")
    ready = next(item for item in plan.items if item.id == "found.ready")
    assert f"Limit {quantities.show(checked.limit_a, 'A')} checked" in ready.do
