"""Discharge, clips, and the series lamp: what the plan makes of them and how the walk goes through them."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace
from typing import Literal

import pytest

from benchkit.errors import FileError
from benchkit.events import (
    Answered,
    BenchFound,
    Closed,
    Decided,
    Judged,
    OutputOff,
    ReadingTaken,
    Resumed,
    StopAsked,
    SupplyState,
    Tripped,
)
from benchkit.procedure.actions import Ask, Fall, SetSupply, Suspect, SwitchOff, Trim, Write
from benchkit.procedure.file import load_procedure, parse_procedure
from benchkit.procedure.items import Item, Plan
from benchkit.procedure.knowledge import at_the_trip as knowledge_of_trip
from benchkit.procedure.knowledge import observations
from benchkit.procedure.plan import make_plan
from benchkit.procedure.sizing import discharge_text
from benchkit.procedure.walk import Walk
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design
from tests.procedure.driver import OFF, OPENED, SHIPPED, Drive, begun, kinds, reading, shipped, small
from tests.procedure.test_plan import CHECKS, HEAD, plan_of
from tests.stage.designs import BREADBOARD, TERN, breadboard, changed, tern

DOWN = 'name = "down"\nkind = "discharge"\ntitle = "Down"'
LARGE = ('local_capacitors = "100 uF"', 'local_capacitors = "100 uF"\nreservoir = "10 mF"')


def large() -> Design:
    return changed(TERN, LARGE, ('bleed = "10 kohm 5 %"', 'bleed = "2.2 kohm 5 %"'))


def single() -> Design:
    return changed(BREADBOARD, ('negative = "-10 V"', 'negative = "0 V"'), ('rest = "0 V"', 'rest = "50 %"'))


def falls(plan: Plan) -> list[Item]:
    return [item for item in plan.items if item.section == "s" and item.kind == "discharge"]


# -- the plan -------------------------------------------------------------------------------------------------------


def test_every_rail_and_rail_to_rail_are_watched_down() -> None:
    items = falls(plan_of(DOWN))
    assert [item.id for item in items] == ["s.down.rail+", "s.down.rail-", "s.down.rails"]
    highs = [item.limits.high for item in items if item.limits is not None]
    assert highs == [1.0, 1.0, 2.0]  # each rail below 1 V is less than 2 V from rail to rail
    assert items[2].point is not None
    assert (items[2].point.red, items[2].point.black) == ("positive rail", "negative rail")
    assert "20.0 V" in items[2].expected


def test_a_large_reservoir_is_looked_at_again_after_a_minute() -> None:
    plan = plan_of(DOWN, design=large())
    own = [item for item in plan.items if item.section == "s" and item.kind in ("wait", "discharge")]
    assert [item.kind for item in own] == ["discharge"] * 3 + ["wait"] + ["discharge"] * 2
    assert own[3].seconds == 60.0
    assert [item.id for item in own[4:]] == ["s.down.second.rail+", "s.down.second.rail-"]
    assert "Second look" in own[4].title


def test_a_single_supply_has_one_rail_to_watch() -> None:
    assert [item.id for item in falls(plan_of(DOWN, design=single()))] == ["s.down.rail+"]


def test_time_and_resistor_are_in_the_words() -> None:
    (rail, *_) = falls(plan_of(DOWN, design=large()))
    seconds = 2200 * 10.1e-3 * math.log(35.0)
    assert f"falls from at most 35.0 V in {seconds:.0f} s" in rail.expected
    assert "1.0 kohm rated 5 W or more" in rail.caution
    assert "4.9 W in the first moment at 70.0 V" in rail.caution
    assert "Never a short" in rail.caution
    text = discharge_text(large())
    assert text.startswith(f"{seconds:.0f} s through the bleed resistor, which takes 0.56 W at first")  # 35² / 2200
    assert "both rails together hold 12 J, 70.0 V from rail to rail" in text


def test_rails_are_not_watched_down_under_power() -> None:
    power = 'name = "on"\nkind = "supply"\ntitle = "t"\nrails = "full"\nlimit = "20 mA"'
    with pytest.raises(FileError, match="watches the rails down while the supply is on"):
        plan_of(power, DOWN)


def test_a_clip_in_the_middle_watches_them_down_from_where_they_were() -> None:
    plan = make_plan(load_procedure(SHIPPED), large())
    first = [item for item in plan.items if item.id.startswith("up.clip-output")]
    assert [item.kind for item in first] == (["off"] + ["discharge"] * 3 + ["tell"] + ["hold", "supply"]), (
        "at the lowest rails little is stored"
    )
    second = [item for item in plan.items if item.id.startswith("bias.clip-emitter")]
    assert [item.kind for item in second][:7] == ["off"] + ["discharge"] * 3 + ["wait"] + ["discharge"] * 2
    assert second[1].falls is not None
    assert second[1].falls.positive_v == 35.0
    assert first[1].falls is not None
    assert first[1].falls.positive_v < 35.0
    assert not any(item.may_go_on for item in (*first, *second) if item.kind == "discharge")


# -- the walk -------------------------------------------------------------------------------------------------------


def at_fall(rail: str = "rail+") -> Drive:
    drive = begun(small()).until(f"made-safe.rails-low.{rail}")
    while not isinstance(drive.open, Fall):
        drive.well()
    return drive


def test_the_probes_are_placed_and_then_the_rail_is_watched() -> None:
    drive = begun(small()).until("made-safe.rails-low.rail+")
    assert isinstance(drive.open, Ask)
    assert drive.open.question.kind == "probes"
    drive.well()
    fall = drive.open
    assert isinstance(fall, Fall)
    assert (fall.point, fall.low_v, fall.question.kind) == ("rail+", 1.0, "watch")
    assert fall.tau_s is None, "the breadboard has no bleed resistor"


@pytest.mark.parametrize(
    ("slowly", "words"),
    [
        (False, "It came down from 34.9 V in 80 s; the bleed resistor alone takes 80 s by the design."),
        (True, "bleed resistor open?"),
    ],
)
def test_the_verdict_says_how_it_came_down(slowly: bool, words: str) -> None:
    walk = Walk(plan_of(DOWN, design=large()))
    drive = begun(walk).until("s.down.rail+")
    drive.well()
    item = walk.item(drive.state)
    low = reading(item, 0.95)
    drive.tell(replace(low, fell_from_v=34.9, fell_s=80.0, fell_slowly=slowly))
    assert isinstance(drive.open, Write)
    assert isinstance(drive.open.event, Judged)
    assert drive.open.event.verdict == "pass"
    assert words in drive.open.event.why


def test_old_readings_say_nothing_of_a_fall() -> None:
    drive = at_fall()
    drive.tell(reading(drive.walk.item(drive.state), 0.2))
    assert isinstance(drive.open, Write)
    assert isinstance(drive.open.event, Judged)
    assert "came down" not in drive.open.event.why


def test_a_rail_to_rail_that_stays_up_keeps_hands_off() -> None:
    drive = at_fall("rails")
    drive.tell(reading(drive.walk.item(drive.state), 12.0))
    drive.well()
    assert isinstance(drive.open, Ask)
    assert "Hands off until every rail has been seen low" in drive.open.question.caution
    closed = drive.to_end()
    assert closed.verdict == "pass", "it was seen low in the end"


def test_suspects_are_asked_after_a_trip() -> None:
    drive = begun(small()).until("bias.soak")
    asked = len(drive.asides)
    drive.tell(Tripped(reason="rail+ in its limit"))
    assert kinds(drive.actions) == ["SwitchOff", "Suspect"]
    assert drive.state.suspecting == drive.state.count
    assert drive.asides[asked].item == "bias.soak"
    drive.tell(Tripped(reason="again"))
    assert "Suspect" not in kinds(drive.actions), "once"


def held(volts: float, limit_a: float = 0.04, *, negative: bool = False) -> Tripped:
    """The supply holds the positive rail, or both, by its limit, on the way to `volts`."""
    state = SupplyState(
        output_on=True, positive_v=0.7 * volts, negative_v=-volts, positive_a=limit_a, negative_a=limit_a,
        set_positive_v=volts, set_negative_v=-volts, limit_a=limit_a, positive_in_limit=True,
        negative_in_limit=negative,
    )  # fmt: skip
    return Tripped(reason="rail+ is held by its current limit", what="rail+", state=state)


def at_the_trip(drive: Drive, event: Tripped) -> list[tuple[Condition, str, float]]:
    """What the suspects are told of the trip, beside the readings before it; its condition has a name too."""
    before = {(one.conditions, one.point) for one in observations(drive.walk.plan, drive.state)}
    drive.tell(event)
    (suspect,) = [action for action in drive.actions if isinstance(action, Suspect)]
    told = [one for one in suspect.known if (one.conditions, one.point) not in before]
    assert {one.conditions for one in told} <= {conditions for conditions, _ in suspect.names}
    conditions = [condition for one in told for condition in one.conditions if isinstance(condition, Condition)]
    return [(condition, one.point, one.value) for one in told for condition in conditions[: len(one.conditions)]]


def test_the_limit_that_a_rail_ran_into_is_a_reading_on_the_way_up() -> None:
    drive = begun(small()).until("power.on")
    while not isinstance(drive.open, SetSupply):
        drive.well()
    told = at_the_trip(drive, held(2.5, negative=True))
    assert [(point, value) for _, point, value in told] == [("rail+.current", 0.04), ("rail-.current", 0.04)]
    for condition, _, _ in told:
        assert (condition.positive_v, condition.negative_v, condition.limit_a) == (2.5, -2.5, 0.04)
        assert condition.when == "cold", "it had no time to warm"


def test_in_a_trim_the_screw_may_be_anywhere() -> None:
    drive = begun(small()).until(next(item.id for item in small().plan.items if item.kind == "trim"))
    while not isinstance(drive.open, Trim):
        drive.well()
    told = at_the_trip(drive, held(10.0))
    assert {(point, value) for _, point, value in told} == {("rail+.current", 0.04)}
    assert {condition.trimmer for condition, _, _ in told} == {"unknown"}
    drive.tell(Resumed(operator="o"))
    assert not knowledge_of_trip(drive.walk.plan, drive.state), "from before a resume nothing counts"


def test_a_trip_that_no_limit_made_is_no_reading() -> None:
    drive = begun(small()).until("bias.soak")
    seen = replace(held(10.0).state or OFF, positive_in_limit=False)
    assert at_the_trip(drive, Tripped(reason="rail+ is above its line", state=seen)) == []


def test_not_where_nothing_has_been_read() -> None:
    drive = begun(small()).until("look.parts")
    drive.tell(Tripped(reason="r"))
    assert kinds(drive.actions) == ["SwitchOff"]


# -- the series lamp ------------------------------------------------------------------------------------------------

LAMP = """
[[section.step]]
name = "lamp"
kind = "series lamp"
title = "Through the lamp"
do = "Is it dark?"
"""
OUTPUT = """
[[section.step]]
name = "output"
kind = "measure"
title = "Output"
points = ["output"]
limits = { low = "-1 V", high = "1 V" }
"""
END = """
[[section]]
name = "made-safe"
title = "t"
[[section.step]]
name = "off"
kind = "off"
title = "Off"
[[section.step]]
name = "low"
kind = "discharge"
title = "t"
"""


def lamp_text(more: str = OUTPUT, checks: str = CHECKS) -> str:
    checks = "[[section.step]]".join(part for part in checks.split("[[section.step]]") if 'name = "limit"' not in part)
    return f'{HEAD}\n{checks}\n[[section]]\nname = "first"\ntitle = "t"\n{LAMP}{more}{END}'


def lamp_walk() -> Walk:
    return Walk(make_plan(parse_procedure(lamp_text(), "lamp.toml"), breadboard()))


def step(kind: str, *lines: str) -> str:
    return "\n".join(["", "[[section.step]]", 'name = "x"', f'kind = "{kind}"', 'title = "t"', *lines, ""])


@pytest.mark.parametrize(
    ("more", "words"),
    [
        (step("trim", 'points = ["emitter.upper.1"]', 'share = "100 %"'), "trims while"),
        (step("supply", 'rails = "full"', 'limit = "20 mA"'), "sets a supply while"),
        (step("limit check", 'rails = "2 V"', 'limit = "20 mA"'), "tries the limit while"),
        (step("clip", 'points = ["output"]'), "clips the probes and gives power again while"),
        (step("rule", 'rule = "junction drop"'), "judges a rule while"),
        (step("measure", 'points = ["spread"]', 'limits = "the model"'), "by the model or the target while"),
        (step("measure", 'points = ["emitter.upper.1"]', 'limits = "the target"'), "by the model or the target while"),
        (step("series lamp", 'do = "d"'), "while the unit has power"),
        (step("discharge"), "while the supply is on"),
    ],
)
def test_what_is_not_done_on_the_lamp(more: str, words: str) -> None:
    with pytest.raises(FileError) as caught:
        make_plan(parse_procedure(lamp_text(more), "lamp.toml"), breadboard())
    assert words in str(caught.value)
    if "series lamp:" in str(caught.value):
        assert "moves with the current" in str(caught.value)


@pytest.mark.parametrize("gone", ["rails", "ohms"])
def test_the_lamp_is_no_way_round_the_checks(gone: str) -> None:
    checks = "[[section.step]]".join(
        part for part in CHECKS.split("[[section.step]]") if f'name = "{gone}"' not in part
    )
    with pytest.raises(FileError, match="before the unit is known to be safe"):
        make_plan(parse_procedure(lamp_text(checks=checks), "lamp.toml"), breadboard())


def test_a_hold_point_stands_before_it_and_it_never_claims_to_switch() -> None:
    walk = lamp_walk()
    drive = begun(walk).until("first.lamp.hold")
    assert not drive.state.on_lamp
    drive.well()
    assert drive.state.on_lamp
    assert drive.state.energised == "unknown"
    assert drive.state.ever_on
    assert isinstance(drive.open, Ask)
    assert "Nothing switches this unit off by itself" in drive.open.question.caution
    drive.tell(Answered(item="first.lamp", choice="yes"))
    drive.until("made-safe.off")
    assert kinds(drive.actions) == ["Ask"], "no SwitchOff: there is nothing to switch with"
    assert drive.state.phase == "by hand off"
    assert isinstance(drive.open, Ask)
    assert "pull the plug" in drive.open.question.title
    drive.tell(Answered(item="made-safe.off", choice="done"))
    assert drive.state.energised == "off"
    assert not drive.state.on_lamp
    assert drive.to_end().exit_status == 0
    assert not any(isinstance(action, SwitchOff) for action in drive.asked)


def test_a_lamp_that_glows_ends_the_walk() -> None:
    drive = begun(lamp_walk()).until("first.lamp")
    drive.tell(Answered(item="first.lamp", choice="no", text="it glows"))
    drive.well()
    assert drive.state.stopped == "the operator said no at: Through the lamp"
    assert drive.state.phase == "by hand off"
    drive.tell(Answered(item="made-safe.off", choice="done"))
    assert drive.to_end().exit_status == 4


def test_a_supply_that_reads_off_says_nothing_of_the_lamp() -> None:
    drive = begun(lamp_walk()).until("first.output.output")
    drive.tell(OutputOff(reason="the operator asked for it", confirmed=True, how="read back", state=OFF))
    assert drive.state.energised == "unknown"
    assert drive.state.phase == "by hand off"
    drive.tell(Tripped(reason="r", state=SupplyState(output_on=False)))
    assert drive.state.energised == "unknown"


def is_off(drive: Drive) -> bool:
    return drive.state.energised == "off"


def test_a_walk_that_was_cut_off_on_the_lamp_asks_a_hand_first() -> None:
    drive = begun(lamp_walk()).until("first.output.output")
    drive.tell(Resumed(operator="Mara"))
    drive.tell(BenchFound(meter="m", supply="s", supply_state=OFF))
    assert kinds(drive.actions) == ["Ask"]
    assert not is_off(drive)
    item = drive.walk.item(drive.state).id
    drive.tell(Answered(item=item, choice="done"))
    assert is_off(drive)
    assert not drive.state.stopped, "a lamp that is switched by hand is no fault of the bench"
    assert drive.state.index <= drive.walk.plan.resume


def test_a_whole_walk_on_the_lamp_replays() -> None:
    drive = begun(lamp_walk())
    drive.to_end()
    state, _ = drive.walk.replay(drive.told)
    assert state == drive.state
    assert any(isinstance(event, ReadingTaken) for event, _ in drive.told)


@pytest.mark.parametrize("design", [tern, breadboard, single], ids=lambda one: one.__name__)
def test_the_shipped_look_on_the_lamp_is_walked_without_a_supply(design: Callable[[], Design]) -> None:
    walk = Walk(make_plan(load_procedure(SHIPPED.parent / "first-look-on-lamp.toml"), design()))
    drive = Drive(walk)
    drive.tell(replace(OPENED, supply="manual"))
    assert drive.to_end().exit_status == 0
    assert not any(isinstance(action, (SetSupply, SwitchOff)) for action in drive.asked)
    assert drive.state.energised == "off"


def test_a_single_supply_is_never_told_of_two_rails() -> None:
    plan = make_plan(load_procedure(SHIPPED), single())
    for item in plan.items:
        words = f"{item.title} {item.do} {item.why} {item.caution} {item.expected}"
        for wrong in ("oth rails", "rail-", "rail to rail", "either rail", "each rail"):
            assert wrong not in words, (item.id, wrong, words)
    titles = [item.title for item in plan.items]
    assert len([title for title in titles if title == "Short the supply leads"]) == 1
    assert len([title for title in titles if title.startswith("Prove the polarity")]) == 1


def test_the_hold_before_the_lamp_warns_of_mains_and_says_what_the_yes_does() -> None:
    (hold,) = (item for item in lamp_walk().plan.items if item.id == "first.lamp.hold")
    assert "Mains voltage inside" in hold.caution
    assert "nothing here can" in hold.caution
    assert "you switch mains on" in hold.why


# -- charge that nobody put there -----------------------------------------------------------------------------------


def at_stored(value: float, *, supply: Literal["scpi", "manual"] = "scpi") -> Drive:
    """A walk whose first look at a rail reads `value`."""
    walk = Walk(shipped("tern-40"))
    drive = Drive(walk)
    drive.tell(replace(OPENED, supply=supply))
    drive.until("cold.stored.rail+")
    drive.well()
    drive.tell(reading(drive.walk.item(drive.state), value))
    assert isinstance(drive.open, Write)
    drive.tell(drive.open.event)
    return drive


@pytest.mark.parametrize("supply", ["scpi", "manual"])
def test_a_charged_rail_is_seen_low_although_nothing_was_ever_switched_on(supply: Literal["scpi", "manual"]) -> None:
    drive = at_stored(35.0, supply=supply)
    drive.tell(Decided(item="cold.stored.rail+", choice="make safe"))
    assert not drive.state.ever_on
    drive.well()
    assert drive.state.phase != "closing"
    assert drive.walk.item(drive.state).id == "made-safe.rails-low.rail+"
    assert drive.to_end().verdict == "fail"
    assert sum(isinstance(action, Fall) for action in drive.asked) == 3


def test_a_look_at_a_rail_that_came_to_nothing_is_made_up_for() -> None:
    drive = begun(Walk(shipped("tern-40"))).until("cold.stored.rail+")
    drive.tell(StopAsked())
    drive.well()
    assert drive.walk.item(drive.state).id == "made-safe.rails-low.rail+"


def test_rails_that_were_seen_low_and_never_had_power_end_the_walk() -> None:
    drive = begun(Walk(shipped("tern-40"))).until("cold.trimmer-least")
    drive.tell(StopAsked())
    drive.well()
    assert drive.state.phase == "closing"


def test_a_record_that_closed_without_that_look_still_replays() -> None:
    drive = at_stored(35.0)
    drive.tell(Decided(item="cold.stored.rail+", choice="make safe"))
    drive.well()
    closed = Closed(count=drive.state.count, verdict="fail", stopped=drive.state.stopped, exit_status=1)
    state, _ = drive.walk.replay([*drive.told, (closed, 99.0)])
    assert state.closed == closed


def test_a_supply_that_was_on_when_it_was_found_is_told_of_at_the_first_question() -> None:
    drive = begun(small())
    drive.tell(BenchFound(meter="m", supply="s", supply_state=replace(OFF, output_on=True)))
    drive.well()
    assert drive.walk.item(drive.state).id != "bench"
    assert drive.state.note.startswith("CAUTION: The supply's output was on when it was found.")
    assert "switched off, and read back as off" in drive.state.note


def test_the_heat_sinks_bond_has_a_question_of_its_own_that_nobody_passes_over() -> None:
    items = shipped("tern-40").items
    last = max(number for number, item in enumerate(items) if item.id.startswith("cold.insulation."))
    bond = items[last + 1]
    assert (bond.id, bond.kind, bond.may_go_on) == ("cold.bond", "confirm", False)
    assert last + 1 < next(number for number, item in enumerate(items) if item.raises)
