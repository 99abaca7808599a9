"""A unit as it was found that comes into its limit: off, and on from least bias; elsewhere the walk ends there."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import pytest

from benchkit.errors import FileError
from benchkit.events import (
    Decided,
    OutputOff,
    PartsReplaced,
    Resumed,
    SupplySet,
    SupplyState,
    Suspected,
    Tripped,
)
from benchkit.procedure import knowledge
from benchkit.procedure.actions import Read, SetSupply, Suspect, SwitchOff, Write
from benchkit.procedure.file import load_procedure, parse_procedure
from benchkit.procedure.plan import make_plan
from benchkit.procedure.sizing import rails_text
from benchkit.procedure.walk import Walk
from benchkit.shipped import find_procedure
from benchkit.stage.forcing import LIMIT_SHARE
from tests.procedure.driver import OFF, Drive, begun, item_of, reading, supply_state, suspected
from tests.procedure.test_leaving_out import repair
from tests.stage.designs import breadboard

AT_DROPS = "found.drops.emitter.upper.1"
HELD = "rail+ is held by its current limit"
TEXT = find_procedure("re-bias").read_text(encoding="utf-8")


def limited(drive: Drive, **more: Any) -> Tripped:
    """A rail in its limit, at the rails and the limit that stand."""
    supply = drive.state.supply
    assert supply is not None
    seen = replace(supply, positive_in_limit=True, **more)
    return Tripped(reason=HELD, what="rail+", value=seen.limit_a, limit=seen.limit_a, state=seen)


def off(reason: str = f"tripped: {HELD}", *, confirmed: bool = True, state: SupplyState = OFF) -> OutputOff:
    return OutputOff(reason=reason, confirmed=confirmed, how="read back as off", state=state)


def tripped(at: str = AT_DROPS) -> Drive:
    """A walk that has come into its limit, and gone off."""
    drive = begun(repair()).until(at)
    drive.tell(limited(drive))
    drive.tell(off())
    return drive


def names(drive: Drive) -> list[str]:
    return [item.id for item in drive.walk.plan.items if not drive.state.leaves_out(item)]


def kept(drive: Drive) -> list[str]:
    return [getattr(event, "item", "") for event, _ in drive.told]


def test_a_rail_in_its_limit_leads_to_off_and_on_from_least_bias() -> None:
    drive = begun(repair()).until(AT_DROPS)
    actions = drive.tell(limited(drive))
    assert [type(action) for action in actions] == [SwitchOff, Suspect]
    assert isinstance(actions[0], SwitchOff)
    assert actions[0].reason == f"tripped: {HELD}"
    assert not drive.state.stopped
    drive.tell(off())
    drive.until("found.rails-low.rails")
    assert HELD in drive.state.note
    drive.until("repair.replaced")
    assert HELD in drive.state.note
    assert "least bias" in drive.state.note
    assert all(f"found.rails-low.{rail}" in kept(drive) for rail in ("rail+", "rail-", "rails")), "seen low first"
    drive.well()
    assert drive.walk.item(drive.state).section == "careful", (
        "nothing was replaced, the trimmer goes to least all the same"
    )
    closed = drive.to_end()
    assert (closed.verdict, closed.stopped, closed.exit_status) == ("pass", "", 0)
    assert "careful.trimmer-end.ohm.spreader.lower" in kept(drive)
    assert drive.state.result(AT_DROPS) is None
    assert not any(item.startswith("again.") for item in kept(drive))


def test_the_next_power_is_a_first_power() -> None:
    drive = tripped()
    drive.until("careful.on")
    sets = [action for action in drive.asked if isinstance(action, SetSupply)]
    first = next(action for action in sets if action.item == "found.on")
    assert sets[-1].item == "careful.on"
    assert sets[-1].positive_v == first.positive_v
    assert sets[-1].limit_a <= first.limit_a


def test_the_supply_may_say_twice_that_it_is_off() -> None:
    drive = tripped()
    before = drive.state.index
    drive.tell(off())
    assert drive.state.index == before
    assert not drive.state.stopped
    drive.tell(off("the operator asked for it"))
    assert drive.state.stopped


def test_an_off_that_is_not_confirmed_ends_the_walk() -> None:
    drive = begun(repair()).until(AT_DROPS)
    drive.tell(limited(drive))
    drive.tell(off(confirmed=False))
    assert drive.state.phase == "by hand off"
    drive.well()
    assert drive.state.stopped
    assert drive.state.stop_status == 3


def test_the_second_time_ends_the_walk() -> None:
    drive = tripped()
    drive.until("careful.output-first.output")
    drive.tell(limited(drive))
    assert drive.state.stopped == f"tripped: {HELD}"
    assert drive.walk.way_out(drive.state)


def test_later_sections_end_at_their_limit() -> None:
    drive = begun(repair()).until("bias.soak")
    drive.tell(limited(drive))
    assert drive.state.stopped == f"tripped: {HELD}"


@pytest.mark.parametrize(
    "event",
    [
        Tripped(reason="it rises by itself", what="emitter.upper.1", value=0.1, limit=None, state=None),
        Tripped(
            reason="the supply switched its positive output off by itself", what="positive output",
            state=SupplyState(output_on=None, positive_v=9.0, negative_v=-9.0),
        ),
        Tripped(
            reason="rail+ stands at 12 V, beyond 11 V", what="rail+", value=12.0, limit=11.0,
            state=SupplyState(output_on=True, positive_v=12.0, negative_v=-9.0),
        ),
        Tripped(
            reason="rail+ stands at 12 V, beyond 11 V", what="rail+", value=12.0, limit=11.0,
            state=SupplyState(output_on=True, positive_v=12.0, negative_v=-9.0, limit_a=0.2, negative_in_limit=True),
        ),
        Tripped(
            reason="its own protection", what="positive protection",
            state=SupplyState(
                output_on=None, positive_v=11.2, negative_v=-9.0, positive_a=0.0, negative_a=0.199, limit_a=0.2,
                positive_tripped=True, protection_positive_v=10.9, protection_negative_v=10.9,
            ),
        ),
        Tripped(
            reason="its own protection", what="positive protection",
            state=SupplyState(
                output_on=None, positive_v=9.0, negative_v=-9.0, positive_a=0.0, negative_a=0.02, limit_a=0.2,
                positive_tripped=True, protection_positive_v=10.9, protection_negative_v=10.9,
            ),
        ),
    ],
    ids=["runaway", "by itself", "too high", "too high beside a limit", "over-voltage", "with little current"],
)  # fmt: skip
def test_any_other_trip_ends_the_walk(event: Tripped) -> None:
    drive = begun(repair()).until(AT_DROPS)
    drive.tell(event)
    assert drive.state.stopped


@pytest.mark.parametrize("tripped_itself", [True, False])
def test_a_protection_that_tripped_is_cleared_by_a_person(*, tripped_itself: bool) -> None:
    drive = begun(repair()).until(AT_DROPS)
    supply = drive.state.supply
    assert supply is not None
    gone = replace(
        supply, output_on=None, positive_tripped=tripped_itself, positive_in_limit=not tripped_itself, positive_a=0.0,
        negative_a=supply.limit_a, protection_positive_v=1.1 * (supply.positive_v or 0.0),
    )  # fmt: skip
    what = "positive protection" if tripped_itself else "rail+"
    drive.tell(Tripped(reason="off by its own protection", what=what, limit=supply.limit_a, state=gone))
    drive.tell(off("tripped: off by its own protection", state=replace(OFF, positive_tripped=tripped_itself)))
    drive.until("careful.on")
    assert ("careful.clear" in kept(drive)) is tripped_itself


def test_a_supply_set_by_hand_that_stands_in_its_limit_leads_there_too() -> None:
    walk = repair()
    drive = begun(walk)
    drive.state = replace(drive.state, opened=replace(drive.state.opened, supply="manual"))  # type: ignore[type-var]
    drive.until("found.on")
    assert isinstance(drive.open, SetSupply)
    drive.tell(SupplySet(item="found.on", state=replace(supply_state(drive.open), positive_in_limit=True)))
    actions = drive.tell(drive.open.event) if isinstance(drive.open, Write) else ()
    assert sum(isinstance(action, Suspect) for action in actions) == 1
    assert any(one.event for one in asked(drive).known), "the limit that was typed is a reading too"
    assert drive.walk.item(drive.state).id == "found.off"
    assert drive.state.limited
    drive.tell(OutputOff(reason="x", confirmed=False, how="benchkit has no hand on this supply.", state=None))
    drive.until("careful.trimmer-least")
    assert drive.to_end().verdict == "pass", "a first rail in its limit is how the unit was found"


def test_a_repair_makes_the_checks_behind_it_too() -> None:
    drive = tripped()
    drive.until("repair.replaced")
    drive.tell(PartsReplaced(item="repair.replaced", parts="output.upper.1", semiconductors=True))
    drive.until("bias.clip-emitter.clip")
    assert "again.rail-to-rail.ohm.rails" in kept(drive)
    assert "careful.trimmer-end.ohm.spreader.lower" in kept(drive)


def test_what_failed_as_found_before_the_limit_counts_no_more() -> None:
    drive = begun(repair()).until("found.currents-low.rail+.current")
    assert isinstance(drive.open, Read)
    drive.tell(reading(item_of(drive.walk, drive.open.item), 99.0))
    drive.well()
    assert drive.state.phase == "deciding"
    drive.tell(Decided(item="found.currents-low.rail+.current", choice="go on", reason="as it was found"))
    drive.tell(suspected(asked(drive), "healthy"))
    drive.until(AT_DROPS)
    drive.tell(limited(drive))
    drive.tell(off())
    assert drive.to_end().verdict == "pass"


def asked(drive: Drive) -> Suspect:
    action = drive.newest(Suspect)
    assert isinstance(action, Suspect)
    return action


def test_the_suspects_are_told_of_the_limit_until_the_trimmer_is_turned() -> None:
    drive = tripped("found.output-50.output")
    told = asked(drive)
    assert told.item == "found.output-50.output"
    events = [one for one in told.known if one.event]
    assert [one.point for one in events] == ["rail+.current"]
    assert drive.state.supply is not None
    assert events[0].standard_uncertainty == pytest.approx(LIMIT_SHARE * events[0].value)
    assert any(one.point == "output" for one in told.known), "what was read before still counts"
    drive.until("careful.ready")
    assert not any(one.event for one in knowledge.observations(drive.walk.plan, drive.state))


def test_a_rail_that_rises_spends_a_part_of_its_limit_on_capacitors() -> None:
    drive = begun(repair()).until("found.rails-50")
    supply = drive.state.supply
    assert supply is not None
    drive.tell(limited(drive))
    (event,) = [one for one in asked(drive).known if one.event]
    assert event.standard_uncertainty > 5.0 * LIMIT_SHARE * event.value
    assert len(event.conditions) == 1, "cold on the way up"


def test_an_answer_about_suspects_comes_when_the_walk_has_gone_on() -> None:
    drive = tripped()
    drive.until("found.rails-low.rail-")
    drive.tell(suspected(asked(drive), "output.upper.1: leaky"))
    assert isinstance(drive.state.suspicion, Suspected)
    drive.until("repair.replaced")
    assert drive.walk.suspects_a_fault(drive.state)


def test_a_walk_that_was_cut_off_after_it_does_not_power_the_unit_as_found_again() -> None:
    drive = tripped()
    drive.until("careful.ready")
    drive.tell(Resumed(operator="Mara", torn=""))
    drive.until("careful.on")
    later = kept(drive)[kept(drive).index("careful.trimmer-least") :]
    assert "found.on" not in later
    assert "careful.trimmer-end.ohm.spreader.lower" in later[1:]


def test_a_replay_ends_where_the_walk_was() -> None:
    drive = tripped()
    drive.until("careful.on")
    state, _ = drive.walk.replay(drive.told)
    assert state == drive.state


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ('at_limit = "off"', 'at_limit = "on"', "has to name a step of the kind 'off'"),
        ('at_limit = "off"', 'at_limit = "nowhere"', "has to name a step of the kind 'off'"),
        ('at_limit = "off"', 'at_limit = "first"', "no step of the kind 'supply' before it"),
        ('only_if = "from least bias"', 'only_if = "parts replaced"', "proves the trimmer's end"),
        ('only_if = "from least bias"', 'only_if = "no parts replaced"', "after parts have been replaced"),
    ],
)
def test_a_procedure_without_the_way_from_least_bias_is_refused(old: str, new: str, said: str) -> None:
    assert TEXT.count(old) == 1
    ready = '[[section.step]]\nname = "ready"\n'
    off_first = f'[[section.step]]\nname = "first"\nkind = "off"\ntitle = "Off"\n\n{ready}'
    procedure = TEXT.replace(ready, off_first, 1).replace(old, new)
    with pytest.raises(FileError) as caught:
        make_plan(parse_procedure(procedure, "own.toml"), breadboard())
    assert said in str(caught.value)


def test_hands_go_in_only_behind_rails_that_were_seen_low() -> None:
    low = TEXT.index('[[section.step]]\nname = "rails-low"')
    repair_at = TEXT.index("# ---", low)
    with pytest.raises(FileError, match="no step of the kind 'discharge' behind it"):
        parse_procedure(TEXT[:low] + TEXT[repair_at:], "own.toml")


def test_without_power_the_words_are_those_that_power_begins_with() -> None:
    plan = make_plan(load_procedure(find_procedure("re-bias")), breadboard())
    ready = next(item for item in plan.items if item.id == "careful.ready")
    on = next(item for item in plan.items if item.id == "careful.on")
    assert rails_text(on.positive_v, on.negative_v) in ready.do


def test_without_such_a_way_it_ends_as_before() -> None:
    text = TEXT.replace('at_limit = "off"\n', "").replace('only_if = "from least bias"', 'only_if = "parts replaced"')
    drive = begun(Walk(make_plan(parse_procedure(text, "own.toml"), breadboard()))).until(AT_DROPS)
    drive.tell(limited(drive))
    assert drive.state.stopped
    assert not drive.state.limited


def test_what_stands_behind_the_off_stays() -> None:
    plan = make_plan(load_procedure(find_procedure("re-bias")), breadboard())
    leads = [item.id for item in plan.items if item.limited_to]
    assert {item.split(".")[0] for item in leads} == {"found"}
    assert "found.off" not in leads
    assert "found.rails-low.rail+" not in leads
    assert {item.limited_to for item in plan.items if item.limited_to} == {"found.off"}
