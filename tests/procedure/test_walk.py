from __future__ import annotations

import copy
from dataclasses import replace

import pytest

from benchkit.errors import IllegalEvent
from benchkit.events import (
    EVENT_KINDS,
    Answered,
    BenchFound,
    BenchMissing,
    Closed,
    ContactLost,
    Decided,
    Event,
    Judged,
    Noted,
    OutputOff,
    PredictionRefused,
    ReadingMissed,
    Resumed,
    StopAsked,
    SupplySet,
    SupplyState,
    Tripped,
    Waited,
)
from benchkit.procedure.actions import (
    Action,
    Ask,
    Connect,
    Fall,
    Predict,
    Read,
    SetSupply,
    SwitchOff,
    Trim,
    Write,
)
from benchkit.procedure.securing import MAKING_SURE, NOT_ON_YET, OFF_AS_SAID, OFF_ASKED, STILL_OFF
from benchkit.procedure.state import PHASES, State
from benchkit.procedure.table import TABLE, table_text
from benchkit.procedure.walk import Walk
from tests.procedure.driver import (
    OFF,
    OPENED,
    Drive,
    bad,
    begun,
    every_event,
    good,
    item_of,
    judged,
    kinds,
    reading,
    shipped,
    small,
    sudden,
    supply_state,
)

Node = tuple[str, int, str, bool, str]


def node(state: State, action: Action | None) -> Node:
    waits_for = type(action).__name__
    if isinstance(action, Write) and isinstance(action.event, Judged):
        waits_for += f" {action.event.verdict}"
    if isinstance(action, Ask):
        waits_for += f" {[choice.value for choice in action.question.choices]}"
    return state.phase, state.index, state.extra, bool(state.stopped), waits_for


def explored(walk: Walk) -> tuple[dict[Node, State], dict[Node, set[Node]]]:
    """Search everything that the driver's events reach: one state for each node, and the edges."""
    found: dict[Node, State] = {}
    edges: dict[Node, set[Node]] = {}
    first = State()
    waiting: list[tuple[State, Action | None]] = [(first, None)]
    found[node(first, None)] = first
    while waiting:
        state, action = waiting.pop()
        here = node(state, action)
        edges[here] = set()
        if state.phase == "unopened":
            events: list[Event] = [OPENED]
        else:
            events = [] if action is None else [good(walk, state, action), *bad(walk, state, action)]
            if state.phase != "closed":
                events += sudden()
        for event in events:
            after, actions = walk.handle(state, event, 0.0)
            same = (after.phase, after.index) == (state.phase, state.index)
            fore = [one for one in actions if not one.aside]
            then = fore[-1] if fore else (action if same else None)
            there = node(after, then)
            edges[here].add(there)
            if there not in found:
                found[there] = after
                waiting.append((after, then))
    return found, edges


@pytest.fixture(scope="module")
def graph() -> tuple[dict[Node, State], dict[Node, set[Node]]]:
    return explored(small())


def reach(edges: dict[Node, set[Node]], goals: set[Node]) -> set[Node]:
    """Every node from which some goal can be reached."""
    back: dict[Node, set[Node]] = {}
    for start, ends in edges.items():
        for end in ends:
            back.setdefault(end, set()).add(start)
    seen, waiting = set(goals), list(goals)
    while waiting:
        for start in back.get(waiting.pop(), ()):
            if start not in seen:
                seen.add(start)
                waiting.append(start)
    return seen


# -- the table ------------------------------------------------------------------------------------------------------


def test_every_phase_is_reached(graph: tuple[dict[Node, State], dict[Node, set[Node]]]) -> None:
    found, _ = graph
    assert {state.phase for state in found.values()} == set(PHASES) - {"offering"}, "offering: test_modelling.py"


def test_every_phase_times_every_event(graph: tuple[dict[Node, State], dict[Node, set[Node]]]) -> None:
    walk = small()
    for state in graph[0].values():
        snapshot = copy.deepcopy(state)
        events = every_event(walk, state)
        assert {type(event) for event in events} == set(EVENT_KINDS)
        for event in events:
            if (state.phase, type(event)) in TABLE:
                continue
            with pytest.raises(IllegalEvent, match=event.name):
                walk.handle(state, event, 1.0)
        assert state == snapshot


def test_a_legal_event_leaves_the_old_state_alone(graph: tuple[dict[Node, State], dict[Node, set[Node]]]) -> None:
    walk = small()
    for state in graph[0].values():
        snapshot = copy.deepcopy(state)
        for event in every_event(walk, state):
            if (state.phase, type(event)) in TABLE:
                try:
                    after, _ = walk.handle(state, event, 1.0)
                except IllegalEvent:
                    continue
                assert after.count == state.count + 1
        assert state == snapshot


@pytest.mark.parametrize("item", ["", "cold.least", "nowhere"])
def test_an_event_of_another_item_is_refused(item: str) -> None:
    drive = begun(small()).until("power.ready")
    before = drive.state
    with pytest.raises(IllegalEvent, match=r"power\.ready"):
        drive.tell(Answered(item=item, choice="yes"))
    assert drive.state is before


def test_the_table_prints_itself() -> None:
    lines = table_text().splitlines()
    assert [line.split(":")[0] for line in lines] == list(PHASES)
    assert lines[-1] == "closed: takes nothing"
    assert lines[0] == "unopened: walk opened"
    assert all("stop asked" in line for line in lines[1:-1])


def test_every_method_of_the_table_exists() -> None:
    for method in TABLE.values():
        assert callable(getattr(Walk, method))


# -- the way out ----------------------------------------------------------------------------------------------------


def test_every_node_reaches_closed(graph: tuple[dict[Node, State], dict[Node, set[Node]]]) -> None:
    found, edges = graph
    closed = {here for here, state in found.items() if state.phase == "closed"}
    assert closed
    assert set(found) - reach(edges, closed) == set()


@pytest.mark.parametrize("event", [StopAsked(), Tripped(reason="r"), ContactLost(who="the supply", problem="p")])
def test_every_phase_has_a_way_to_made_safe(
    graph: tuple[dict[Node, State], dict[Node, set[Node]]], event: Event
) -> None:
    walk = small()
    for state in graph[0].values():
        if state.phase in ("unopened", "closed"):
            continue
        after, actions = walk.handle(state, event, 1.0)
        assert after.stopped
        assert not any(isinstance(action, SetSupply) for action in actions)
        if state.phase == "closing":
            assert kinds(actions) == ["Write"]
        elif walk.way_out(state) and state.phase in ("switching off", "by hand off"):
            assert (after.phase, after.index) == (state.phase, state.index)
        else:
            assert after.index == walk.plan.made_safe
            assert kinds([action for action in actions if not action.aside]) == ["SwitchOff"]


def test_nothing_is_energised_on_the_way_out(graph: tuple[dict[Node, State], dict[Node, set[Node]]]) -> None:
    walk = small()
    assert all(not (walk.way_out(state) and state.phase == "setting") for state in graph[0].values())


def test_the_first_reason_to_stop_stays() -> None:
    drive = begun(small()).until("bias.soak")
    drive.tell(Tripped(reason="rail+ in its limit"))
    drive.tell(ContactLost(who="the meter", problem="gone"))
    closed = drive.to_end()
    assert closed.stopped == "tripped: rail+ in its limit"
    assert drive.state.stopped_at == "bias.soak"
    assert closed.exit_status == 4


def test_a_trip_says_what_comes_next() -> None:
    drive = begun(small()).until("bias.soak")
    drive.tell(Tripped(reason="rail+ in its limit"))
    assert "no second try at a higher limit" in drive.state.note


# -- a walk that goes well ------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["small", "tern-40", "breadboard"])
def test_a_whole_walk_passes(name: str) -> None:
    walk = small() if name == "small" else Walk(shipped(name))
    drive = begun(walk)
    closed = drive.to_end(2000)
    assert (closed.verdict, closed.exit_status, closed.stopped) == ("pass", 0, "")
    assert closed.count == len(drive.told) - 1
    assert walk.replay(drive.told) == (drive.state, ())


def test_each_condition_is_predicted_once() -> None:
    drive = begun(Walk(shipped("tern-40")))
    drive.to_end(2000)
    keys = [action.key for action in drive.asked if isinstance(action, Predict)]
    assert len(keys) == len(set(keys))
    cold = next(action for action in drive.asked if isinstance(action, Predict))
    assert {"ohm.spreader.lower", "ohm.rails", "diode.driver.upper"} <= set(cold.points)


def test_probes_that_are_on_the_point_are_not_asked_for_again() -> None:
    drive = begun(small()).until("bias.trim.emitter.upper.1")
    assert isinstance(drive.open, Trim)
    assert drive.state.probes == "emitter.upper.1"
    drive.tell(reading(drive.walk.item(drive.state), 1.0))
    drive.well()
    assert drive.state.phase == "deciding"
    drive.tell(Decided(item=drive.walk.item(drive.state).id, choice="again"))
    assert drive.state.probes == ""


def test_replay_of_any_beginning_gives_the_same_state() -> None:
    walk = small()
    drive = begun(walk).until("bias.soak")
    drive.tell(Tripped(reason="r"))
    drive.to_end()
    for length in range(1, len(drive.told) + 1):
        state, _ = walk.replay(drive.told[:length])
        assert state.count == length
    assert state == drive.state


# -- hold points ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("choice", ["done", "no"])
def test_nothing_but_yes_passes_a_hold_point(choice: str) -> None:
    for hold in ("limit.check.hold", "power.ready", "power.full.hold", "bias.clip.again.hold", "bias.room.hold"):
        drive = begun(small()).until(hold)
        answer = Answered(item=hold, choice=choice)  # type: ignore[arg-type]
        if choice == "no":
            drive.tell(answer)
            assert kinds(drive.actions) == ["SwitchOff"]
            assert drive.to_end().exit_status == 4
        else:
            with pytest.raises(IllegalEvent, match="yes"):
                drive.tell(answer)


def test_a_confirmation_is_yes_or_no() -> None:
    drive = begun(small()).until("look.parts")
    with pytest.raises(IllegalEvent, match="yes or no"):
        drive.tell(Answered(item="look.parts", choice="done"))
    drive.tell(Answered(item="look.parts", choice="no"))
    drive.well()
    assert drive.state.phase == "deciding"


@pytest.mark.parametrize("choice", ["yes", "no"])
def test_told_and_placed_are_answered_done(choice: str) -> None:
    for item in ("cold.least", "power.output-first.output"):
        drive = begun(small()).until(item)
        while not isinstance(drive.open, Ask):
            drive.well()
        with pytest.raises(IllegalEvent, match="done"):
            drive.tell(Answered(item=item, choice=choice))  # type: ignore[arg-type]


# -- what nobody passes over ----------------------------------------------------------------------------------------

NEVER = ["cold.end.ohm.spreader.lower", "cold.rails.ohm.rails", "power.output-first.output", "power.offset"]


@pytest.mark.parametrize("item", NEVER)
@pytest.mark.parametrize("verdict", ["fail", "undecided"])
def test_no_override(item: str, verdict: str) -> None:
    drive = begun(small()).until(item)
    while drive.state.phase != "judging":
        drive.well()
    drive.tell(judged(item, verdict))
    assert isinstance(drive.open, Ask)
    assert [choice.value for choice in drive.open.question.choices] == ["again", "make safe"]
    before = drive.state
    with pytest.raises(IllegalEvent, match="can't be passed over"):
        drive.tell(Decided(item=item, choice="go on", reason="it will be all right"))
    assert drive.state is before


@pytest.mark.parametrize("verdict", ["fail", "undecided"])
def test_no_second_try_of_the_limit_check_in_one_walk(verdict: str) -> None:
    drive = begun(small()).until("limit.check")
    assert isinstance(drive.open, SetSupply)
    currents = {"fail": 0.5, "undecided": None}[verdict]
    drive.tell(SupplySet(item="limit.check", state=replace(supply_state(drive.open), negative_a=currents)))
    written = drive.open
    assert isinstance(written, Write)
    assert isinstance(written.event, Judged)
    assert written.event.verdict == verdict
    drive.well()
    assert kinds(drive.actions) == ["SwitchOff"]
    closed = drive.to_end()
    assert (closed.verdict, closed.exit_status) == (verdict, 4)


def test_the_shipped_walk_has_no_way_past_the_four() -> None:
    for name in ("tern-40", "breadboard"):
        for item in shipped(name).items:
            point = "" if item.point is None else item.point.name
            fixed = (
                item.trimmer_end
                or point in ("ohm.rails", "ohm.rail+", "ohm.rail-")
                or item.kind == "limit check"
                or item.rule == "offset before load"
                or "output-first" in item.id
            )
            if fixed:
                assert not item.may_go_on, item.id


def test_an_override_wants_a_reason_and_stays_a_failure() -> None:
    drive = begun(small()).until("power.current.rail+.current")
    while not isinstance(drive.open, Read):
        drive.well()
    item = drive.walk.item(drive.state)
    drive.tell(reading(item, 99.0))
    drive.well()
    with pytest.raises(IllegalEvent, match="reason"):
        drive.tell(Decided(item=item.id, choice="go on", reason="  "))
    drive.tell(Decided(item=item.id, choice="go on", reason="known"))
    closed = drive.to_end()
    assert (closed.verdict, closed.exit_status) == ("fail", 1)
    assert drive.state.overrides == {item.id: "known"}


def test_a_better_result_takes_an_override_away() -> None:
    drive = begun(small()).until("power.current.rail+.current")
    while not isinstance(drive.open, Read):
        drive.well()
    item = drive.walk.item(drive.state)
    drive.tell(reading(item, 99.0))
    drive.well()
    drive.well()
    assert drive.to_end().verdict == "pass"
    assert drive.state.attempts[item.id] == 2


def test_a_reading_that_was_never_taken_leaves_the_walk_undecided() -> None:
    drive = begun(small()).until("power.current.rail+.current")
    while not isinstance(drive.open, Read):
        drive.well()
    item = drive.walk.item(drive.state)
    drive.tell(ReadingMissed(item=item.id, point="rail+.current", problem="garbled"))
    drive.tell(Decided(item=item.id, choice="go on", reason="the display is broken"))
    closed = drive.to_end()
    assert (closed.verdict, closed.exit_status) == ("undecided", 1)


def test_a_refused_prediction_is_undecided() -> None:
    drive = begun(small()).until("power.current.rail+.current")
    assert drive.state.phase == "reading"  # its limits came with those of the output
    drive = begun(small()).until("power.output-first.output")
    assert isinstance(drive.open, Predict)
    drive.tell(PredictionRefused(item="power.output-first.output", condition=drive.open.key, problem="no solution"))
    written = drive.open
    assert isinstance(written, Write)
    assert isinstance(written.event, Judged)
    assert (written.event.verdict, written.event.why) == ("undecided", "no solution")


def test_an_uncertainty_that_is_not_known_never_passes() -> None:
    drive = begun(small()).until("cold.rails.ohm.rails")
    while not isinstance(drive.open, Read):
        drive.well()
    drive.tell(reading(drive.walk.item(drive.state), 1e6, None))
    assert isinstance(drive.open, Write)
    assert isinstance(drive.open.event, Judged)
    assert drive.open.event.verdict == "undecided"


def test_a_reading_of_another_point_is_refused() -> None:
    drive = begun(small()).until("cold.rails.ohm.rails")
    while not isinstance(drive.open, Read):
        drive.well()
    wrong = reading(item_of(drive.walk, "cold.end.ohm.spreader.lower"), 1.0)
    with pytest.raises(IllegalEvent, match=r"ohm\.rails"):
        drive.tell(replace(wrong, item="cold.rails.ohm.rails"))


# -- supply ---------------------------------------------------------------------------------------------------------

GOOD = SupplyState(output_on=True, positive_v=10.0, negative_v=-10.0, positive_a=0.01, negative_a=0.01)


@pytest.mark.parametrize(
    ("changes", "why"),
    [
        ({"output_on": False}, "its output is off"),
        ({"output_on": None}, "nothing about its output"),
        ({"positive_in_limit": True}, "rail+ stands in the current limit"),
        ({"positive_in_limit": True, "negative_in_limit": True}, "rail+ and rail- stand in"),
        ({"positive_v": 9.2}, "rail+ was set to 10 V and stands at 9.2 V"),
        ({"negative_v": 10.0}, "rail- was set to -10 V and stands at 10 V"),
        ({"negative_v": None}, "no voltage for rail-"),
        ({"positive_tripped": True}, "rail+ was switched off by the supply's own protection"),
        ({"output_on": False, "positive_tripped": True, "negative_tripped": True}, "rail+ and rail- was switched off"),
    ],
)
def test_rails_that_are_not_as_set_end_the_walk(changes: dict[str, object], why: str) -> None:
    drive = begun(small()).until("power.full")
    drive.tell(SupplySet(item="power.full", state=replace(GOOD, **changes)))  # type: ignore[arg-type]
    assert isinstance(drive.open, Write)
    assert isinstance(drive.open.event, Judged)
    assert drive.open.event.verdict == "fail"
    assert why in drive.open.event.why
    drive.well()
    assert kinds(drive.actions) == ["SwitchOff", "Suspect"]


def test_rails_as_set_pass() -> None:
    drive = begun(small()).until("power.full")
    drive.tell(SupplySet(item="power.full", state=GOOD))
    assert isinstance(drive.open, Write)
    assert isinstance(drive.open.event, Judged)
    assert drive.open.event.verdict == "pass"
    assert drive.state.energised == "on"


def test_the_output_may_be_on_from_the_moment_that_it_is_told() -> None:
    drive = begun(small()).until("power.ready")
    assert drive.state.energised == "off"
    drive.well()
    assert isinstance(drive.open, SetSupply)
    state = drive.state
    assert state.energised == "unknown"
    assert state.ever_on


@pytest.mark.parametrize("output_on", [True, None])
def test_a_supply_found_on_or_mute_is_switched_off_first(output_on: bool | None) -> None:
    drive = begun(small())
    drive.tell(BenchFound(meter="m", supply="s", supply_state=SupplyState(output_on=output_on)))
    assert kinds(drive.actions) == ["SwitchOff"]
    assert drive.state.phase == "securing"
    drive.well()
    assert drive.walk.item(drive.state).id == "look.warm-state"
    assert drive.state.energised == "off"


def test_nothing_is_known_of_the_supply_before_it_was_asked() -> None:
    assert State().energised == "unknown"


def test_an_off_that_is_not_confirmed_asks_for_a_hand() -> None:
    drive = begun(small()).until("bias.clip.off")
    drive.tell(OutputOff(reason="r", confirmed=False, how="No answer."))
    assert isinstance(drive.open, Ask)
    assert "switch it off by hand" in drive.open.question.title
    assert drive.state.unconfirmed
    drive.well()
    assert not drive.state.unconfirmed
    assert drive.state.energised == "unknown"  # a person's word is no reading back


def test_a_person_is_believed_about_a_supply_that_only_a_person_switches() -> None:
    drive = Drive(small())
    drive.tell(replace(OPENED, supply="manual"))
    drive.tell(BenchFound(meter="m", supply="set by hand"))
    assert drive.state.energised == "unknown"
    drive.until("limit.check.off")
    drive.tell(OutputOff(reason="r", confirmed=False, how="no hand on it"))
    drive.well()
    assert (drive.state.energised, drive.state.supply) == ("off", None)


# -- the end --------------------------------------------------------------------------------------------------------


def high_rail(drive: Drive, rail: str) -> None:
    drive.until(f"made-safe.rails-low.{rail}")
    while not isinstance(drive.open, Fall):
        drive.well()
    drive.tell(reading(drive.walk.item(drive.state), 12.0))
    drive.well()


@pytest.mark.parametrize("rail", ["rail+", "rail-"])
def test_nobody_is_told_to_touch_a_unit_whose_rails_were_not_seen_low(rail: str) -> None:
    drive = begun(small())
    high_rail(drive, rail)
    assert isinstance(drive.open, Ask)
    assert "until every rail has been seen low" in drive.open.question.caution
    assert [choice.value for choice in drive.open.question.choices] == ["again", "go on"]
    drive.tell(Decided(item=drive.walk.item(drive.state).id, choice="go on", reason="the meter is broken"))
    assert "Treat the unit as live" in drive.state.note
    closed = drive.to_end()
    assert closed.verdict == "fail"
    assert "made-safe.unplug" not in {action.item for action in drive.asked}


def test_a_rail_that_falls_later_is_seen_low() -> None:
    drive = begun(small())
    high_rail(drive, "rail+")
    drive.well()
    drive.well()
    assert drive.to_end().verdict == "pass"
    assert "made-safe.unplug" in {action.item for action in drive.asked}


def test_the_last_line_counts_right() -> None:
    drive = begun(small()).until("made-safe.unplug")
    drive.well()
    assert isinstance(drive.open, Write)
    stale = drive.open.event
    drive.tell(Noted(text="the unit at the end"))
    with pytest.raises(IllegalEvent, match="counts"):
        drive.tell(stale)
    closed = drive.to_end()
    assert closed.count == len(drive.told) - 1


def statuses() -> list[tuple[str, list[Event], str, int, str]]:
    trim = "bias.trim.emitter.upper.1"
    return [
        ("cold.least", [StopAsked()], "undecided", 4, "the operator asked for it"),
        ("bias.soak", [Tripped(reason="r")], "undecided", 4, "tripped: r"),
        ("bias.soak", [OutputOff(reason="r", confirmed=True, how="h")], "undecided", 4, "switched off: r"),
        ("bias.soak", [ContactLost(who="the supply", problem="p")], "undecided", 3, "the supply was lost"),
        ("bench", [BenchMissing(problem="p"), Decided(item="bench", choice="make safe")], "undecided", 3, "not answer"),
        ("look.parts", [Answered(item="look.parts", choice="no"), judged("look.parts", "fail"),
                        Decided(item="look.parts", choice="make safe")], "fail", 1, "stopped at Parts"),
        (trim, [ReadingMissed(item=trim, point="emitter.upper.1", problem="p"),
                Decided(item=trim, choice="make safe")], "undecided", 4, "there was no result"),
    ]  # fmt: skip


@pytest.mark.parametrize(("item", "events", "verdict", "status", "why"), statuses())
def test_exit_statuses(item: str, events: list[Event], verdict: str, status: int, why: str) -> None:
    drive = begun(small()).until(item)
    for event in events:
        drive.tell(event)
    closed = drive.to_end()
    assert (closed.verdict, closed.exit_status) == (verdict, status)
    assert why in closed.stopped


def test_a_supply_that_refuses_is_instrument_trouble() -> None:
    from benchkit.events import SupplyRefused

    drive = begun(small()).until("power.full")
    drive.tell(SupplyRefused(item="power.full", problem="ERR -222"))
    assert drive.to_end().exit_status == 3


def test_a_walk_that_never_had_power_ends_with_off() -> None:
    drive = begun(small()).until("cold.least")
    drive.tell(StopAsked())
    drive.well()
    assert drive.state.phase == "closing"


# -- resuming -------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("item", ["bench", "look.parts", "cold.rails.ohm.rails", "power.full", "bias.soak"])
def test_resume_secures_and_goes_back(item: str) -> None:
    walk = small()
    drive = begun(walk).until(item)
    index = drive.state.index
    earlier = {result.item for result in drive.state.results}
    state, _ = walk.replay(drive.told)
    assert state == drive.state
    drive.tell(Resumed(operator="Ida"))
    assert kinds(drive.actions) == ["Connect"]
    assert drive.state.before == earlier
    assert (drive.state.energised, drive.state.probes, drive.state.supply) == ("unknown", "", None)
    drive.tell(BenchFound(meter="m", supply="s", supply_state=OFF))
    assert kinds(drive.actions) == ["SwitchOff"]
    drive.well()
    assert drive.state.index == max(1, min(index, walk.plan.resume))
    drive.until("cold.end.ohm.spreader.lower")
    closed = drive.to_end()
    assert (closed.verdict, closed.exit_status) == ("pass", 0)
    assert drive.state.before <= {"look.parts", "look.warm-state"}


def test_a_resumed_walk_waits_for_the_supply_before_it_believes_a_hand() -> None:
    drive = begun(small()).until("bias.soak")
    drive.tell(Resumed(operator="Ida"))
    with pytest.raises(IllegalEvent):
        drive.tell(Answered(item="bias.soak", choice="done"))
    drive.well()
    drive.tell(OutputOff(reason="r", confirmed=False, how="no answer"))
    assert isinstance(drive.open, Ask)
    drive.well()
    # A supply that does not confirm "off" is not walked on with: once more off, and out.
    assert drive.walk.item(drive.state).id == "made-safe.off"
    assert isinstance(drive.open, SwitchOff)
    closed = drive.to_end()
    assert closed.exit_status == 3
    assert "did not confirm" in closed.stopped


def test_a_supply_that_ignores_off_leads_only_out() -> None:
    drive = begun(small()).until("limit.check")
    while not isinstance(drive.open, SwitchOff):
        drive.well()
    drive.tell(OutputOff(reason="r", confirmed=False, how="the output still reads as on"))
    assert isinstance(drive.open, Ask)
    assert [choice.value for choice in drive.open.question.choices] == ["done"]
    drive.well()
    assert drive.walk.way_out(drive.state)
    assert drive.to_end().exit_status == 3


def test_a_resumed_walk_without_instruments_is_made_safe() -> None:
    drive = begun(small()).until("bias.soak")
    drive.tell(Resumed(operator="Ida"))
    drive.tell(BenchMissing(problem="no answer"))
    with pytest.raises(IllegalEvent):
        drive.tell(Decided(item="bias.soak", choice="go on", reason="hurry"))
    drive.tell(Decided(item="bias.soak", choice="again"))
    assert isinstance(drive.open, Connect)
    drive.tell(BenchMissing(problem="no answer"))
    drive.tell(Decided(item="bias.soak", choice="make safe"))
    assert isinstance(drive.open, SwitchOff)
    assert drive.to_end().exit_status == 3


def test_a_stopped_walk_stays_stopped_when_resumed() -> None:
    drive = begun(small()).until("bias.soak")
    drive.tell(Tripped(reason="r"))
    drive.well()
    drive.tell(Resumed(operator="Ida"))
    closed = drive.to_end()
    assert closed.stopped == "tripped: r"
    assert not any(isinstance(action, SetSupply) for action in drive.asked[-10:])


def test_a_result_from_before_that_could_not_be_repeated_counts_as_none() -> None:
    drive = begun(small()).until("power.full")
    drive.tell(Resumed(operator="Ida"))
    drive.until("power.current.rail+.current")
    assert drive.walk.item(drive.state).id in drive.state.before
    while not isinstance(drive.open, Read):
        drive.well()
    item = drive.walk.item(drive.state).id
    drive.tell(ReadingMissed(item=item, point="rail+.current", problem="garbled"))
    drive.tell(Decided(item=item, choice="go on", reason="had it before"))
    assert drive.to_end().verdict == "undecided"


def test_time_in_a_phase_is_counted_from_its_beginning() -> None:
    walk = small()
    drive = begun(walk).until("bias.soak")
    since_s = drive.state.since_s
    state, _ = walk.handle(drive.state, Noted(text="n"), since_s + 50.0)
    assert state.since_s == since_s
    state, _ = walk.handle(state, Waited(item="bias.soak", seconds=60.0), since_s + 60.0)
    assert state.since_s == since_s + 60.0


def test_closed_takes_nothing() -> None:
    drive = begun(small())
    drive.to_end()
    for event in every_event(drive.walk, drive.state):
        with pytest.raises(IllegalEvent):
            drive.tell(event)
    assert isinstance(drive.state.closed, Closed)


@pytest.mark.parametrize(
    "gone",
    [
        [ContactLost(who="the screen", problem="its end of the pipe is closed"),
         OutputOff(reason="contact with the screen was lost: x", confirmed=True, how="h", state=OFF)],
        [OutputOff(reason="an error of the session: KeyError", confirmed=True, how="h", state=OFF),
         OutputOff(reason="the screen closed the bench", confirmed=True, how="h", state=OFF)],
        [ContactLost(who="the keeper", problem="the keeper failed")],
    ],
)  # fmt: skip
@pytest.mark.parametrize("item", ["cold.rails.ohm.rails", "power.full", "bias.soak", "made-safe.unplug"])
def test_a_walk_whose_screen_went_away_goes_on_when_it_is_resumed(item: str, gone: list[Event]) -> None:
    walk = small()
    drive = begun(walk).until(item)
    index = drive.state.index
    for event in gone:
        drive.tell(event)
    way_out = index >= walk.plan.made_safe
    assert drive.state.stopped or way_out
    drive.tell(Resumed(operator="Ida"))
    assert (drive.state.stopped, drive.state.index, drive.state.cut_at) == ("", index, None)
    drive.well()
    assert isinstance(drive.open, SwitchOff)
    drive.well()
    assert drive.state.index == (walk.plan.made_safe if way_out else walk.plan.resume)
    closed = drive.to_end()
    assert (closed.verdict, closed.exit_status, closed.stopped) == ("pass", 0, "")


@pytest.mark.parametrize("why", [StopAsked(), Tripped(reason="r"), ContactLost(who="the supply", problem="p")])
def test_but_not_one_that_was_stopped_before(why: Event) -> None:
    drive = begun(small()).until("bias.soak")
    drive.tell(why)
    drive.tell(ContactLost(who="the screen", problem="closed"))
    drive.tell(Resumed(operator="Ida"))
    assert drive.state.stopped
    assert drive.to_end().exit_status in (3, 4)


# -- off once more, protection --------------------------------------------------------------------------------------


SURE = OutputOff(reason=f"{MAKING_SURE}: the operator asked for it", confirmed=True, how="read back", state=OFF)


@pytest.mark.parametrize(
    "item", ["look.parts", "cold.rails.ohm.rails", "limit.connect", "power.ready", "bias.clip.rail-"]
)
def test_making_sure_that_it_is_off_keeps_the_place(item: str) -> None:
    drive = begun(small()).until(item)
    before, was_open = drive.state, drive.open
    assert before.energised == "off"
    assert drive.tell(SURE) == ()
    assert (drive.state.phase, drive.state.index, drive.state.stopped) == (before.phase, before.index, "")
    assert drive.open is was_open
    assert drive.state.note == STILL_OFF
    assert drive.to_end().exit_status == 0


@pytest.mark.parametrize("item", ["power.full", "bias.soak", "power.current.rail+.current"])
def test_it_ends_a_walk_whose_supply_was_on_or_being_set(item: str) -> None:
    drive = begun(small()).until(item)
    assert drive.state.energised != "off"
    drive.tell(SURE)
    assert drive.state.stopped
    assert drive.walk.way_out(drive.state)


def test_it_ends_a_walk_whose_supply_does_not_say_so() -> None:
    drive = begun(small()).until("cold.rails.ohm.rails")
    drive.tell(replace(SURE, confirmed=False, how="no answer"))
    assert drive.state.stopped
    assert drive.state.energised == "unknown"


@pytest.mark.parametrize(
    ("supply", "at", "note"),
    [
        ("scpi", "cold.rails.ohm.rails", OFF_ASKED),
        ("manual", "cold.rails.ohm.rails", NOT_ON_YET),
        ("manual", "limit.connect", OFF_AS_SAID),
    ],
)
def test_asking_for_off_while_it_is_off_keeps_the_place(supply: str, at: str, note: str) -> None:
    drive = Drive(small())
    drive.tell(replace(OPENED, supply=supply))  # type: ignore[arg-type]
    drive.until(at)
    before = drive.state
    assert drive.tell(StopAsked(reason=f"{MAKING_SURE}: the operator asked for it")) == ()
    assert (drive.state.phase, drive.state.index, drive.state.stopped) == (before.phase, before.index, "")
    assert drive.state.note == note
    drive.until("power.full")
    drive.tell(StopAsked(reason=f"{MAKING_SURE}: the operator asked for it"))
    assert drive.state.stopped, "by then it is on"


def test_off_for_any_other_reason_still_ends_it() -> None:
    for event in (StopAsked(), replace(SURE, reason="the operator asked for it")):
        drive = begun(small()).until("cold.rails.ohm.rails")
        drive.tell(event)
        assert drive.state.stopped


def test_the_protection_stands_a_tenth_and_a_volt_above_the_rails() -> None:
    drive = begun(small())
    drive.to_end()
    found = [action for action in drive.asked if isinstance(action, SetSupply)]
    assert {action.item for action in found} > {"power.on", "power.full"}
    for action in found:
        assert action.protection_v is not None
        for volts, rail in zip(action.protection_v, (action.positive_v, action.negative_v), strict=True):
            assert volts == pytest.approx(1.1 * abs(rail) + 1.0)


def test_on_the_way_down_the_protection_stays_above_where_the_rails_are() -> None:
    plan = small().plan
    down = replace(item_of(small(), "power.full"), positive_v=5.0, negative_v=-5.0)
    items = tuple(down if item.id == "power.full" else item for item in plan.items)
    drive = begun(Walk(replace(plan, items=items))).until("power.full")
    on = replace(GOOD, set_positive_v=10.0, set_negative_v=-10.0)
    state, actions = drive.walk._enter(replace(drive.state, supply=on), drive.state.index)
    (action,) = actions
    assert isinstance(action, SetSupply)
    assert action.protection_v == pytest.approx((12.0, 12.0))
    assert state.phase == "setting"


@pytest.mark.parametrize(
    ("protection", "words", "unprotected"),
    [((None, None), "CAUTION: this supply tells of no", True), ((12.0, 12.0), "protection at 12.0 V.", False)],
)
def test_a_supply_without_protection_is_a_caution(
    protection: tuple[float | None, float | None], words: str, unprotected: bool
) -> None:
    drive = begun(small()).until("power.full")
    told = replace(GOOD, protection_positive_v=protection[0], protection_negative_v=protection[1])
    drive.tell(SupplySet(item="power.full", state=told))
    assert isinstance(drive.open, Write)
    assert isinstance(drive.open.event, Judged)
    assert drive.open.event.verdict == "pass"
    assert words in drive.open.event.why
    assert drive.state.unprotected == unprotected


def test_what_an_operator_says_of_a_supply_is_said_to_be_his() -> None:
    manual = replace(OPENED, supply="manual")
    drive = Drive(small())
    drive.tell(manual)
    drive.until("power.full")
    drive.tell(SupplySet(item="power.full", state=GOOD))
    assert isinstance(drive.open, Write)
    assert isinstance(drive.open.event, Judged)
    assert drive.open.event.why == "Both rails stand where they were set, none in its limit, says the operator."
    assert not drive.state.unprotected


def test_a_manual_supply_is_asked_off_without_alarm() -> None:
    drive = Drive(small())
    drive.tell(replace(OPENED, supply="manual"))
    drive.until("limit.check.off")
    drive.tell(OutputOff(reason="r", confirmed=False, how="benchkit has no hand on this supply."))
    assert isinstance(drive.open, Ask)
    assert drive.open.question.title == "Switch the supply off by hand"
    drive.tell(Answered(item="limit.check.off", choice="done"))
    assert drive.state.energised == "off"
    assert not drive.state.stopped


def test_what_broke_in_a_rehearsal_is_kept() -> None:
    for broken, words in (((), "none"), (("output.upper.1: collector-emitter short", "emitter.upper.1: open"), "; ")):
        drive = begun(small()).until("look.parts")
        drive.tell(Noted(text="The simulated unit at the end.", broken=broken))
        assert words in drive.state.broken
    drive.tell(Noted(text="a remark"))
    assert drive.state.broken, "another remark says nothing of it"
