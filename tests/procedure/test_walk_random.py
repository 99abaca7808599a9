"""Random walks: whatever happens, in whatever order, these things stay true."""

from __future__ import annotations

import copy

import hypothesis.strategies as st
import pytest
from hypothesis import HealthCheck, settings
from hypothesis.stateful import RuleBasedStateMachine, initialize, precondition, rule

from benchkit.errors import IllegalEvent
from benchkit.events import Answered, Closed, Decided, Event, Judged, PredictionRefused, SupplySet
from benchkit.judge.verdicts import worst
from benchkit.procedure.actions import Ask, SetSupply, SwitchOff, Write
from benchkit.procedure.table import TABLE
from benchkit.procedure.walk import JUDGED_KINDS
from tests.procedure.driver import Drive, aside, bad, begun, every_event, small, sudden

NEVER = {"cold.end.ohm.spreader.lower", "cold.rails.ohm.rails", "power.output-first.output", "power.offset"}


class Walks(RuleBasedStateMachine):
    def __init__(self) -> None:
        super().__init__()
        self.drive: Drive
        self.on = (0.0, 0.0)  # the highest voltage and the limit that the supply has been told since it was off
        self.off_since_stop = False

    @initialize()
    def open(self) -> None:
        self.drive = begun(small())

    def tell(self, event: Event) -> None:
        drive = self.drive
        before, snapshot = drive.state, copy.copy(drive.state)
        actions = drive.tell(event)
        assert before == snapshot
        assert drive.state.count == len(drive.told)
        if not before.stopped and drive.state.stopped:
            self.off_since_stop = before.phase in ("switching off", "by hand off", "closing")
        assert all(action.aside for action in actions[1:]), "one thing at a time, whatever the model is asked aside"
        for action in actions:
            if isinstance(action, SetSupply):
                self.energises(before.index, event, action)
            elif isinstance(action, SwitchOff):
                self.off_since_stop = True
                self.on = (0.0, 0.0)
            elif isinstance(action, Ask):
                self.asks(action)
        self.tries_to_get_past()
        if isinstance(event, PredictionRefused):
            (written,) = actions
            assert isinstance(written, Write)
            assert isinstance(written.event, Judged)
            assert written.event.verdict == "undecided"
        if isinstance(event, Closed):
            self.closed(event)

    def tries_to_get_past(self) -> None:
        """Nobody gets past a result that can't be passed over, whatever is answered."""
        drive = self.drive
        item = drive.walk.item(drive.state)
        if drive.state.phase != "deciding" or item.may_go_on or drive.walk.way_out(drive.state):
            return
        result = drive.state.result(item.id)
        if result is not None and result.odd and not drive.state.missing:
            return
        for reason in ("", "because"):
            with pytest.raises(IllegalEvent):
                drive.walk.handle(drive.state, Decided(item=item.id, choice="go on", reason=reason), 0.0)

    def energises(self, index: int, event: Event, action: SetSupply) -> None:
        drive = self.drive
        assert not drive.state.stopped
        highest_v = max(abs(action.positive_v), abs(action.negative_v))
        if highest_v > self.on[0] or action.limit_a > self.on[1]:
            assert isinstance(event, Answered)
            assert event.choice == "yes"
            assert drive.walk.plan.items[index].kind == "hold"
        self.on = (highest_v, action.limit_a)

    def asks(self, action: Ask) -> None:
        drive, question = self.drive, action.question
        choices = {
            choice.value for choice in question.choices if choice.wants_reason
        }  # an odd one that passed has none
        if question.kind == "decide" and action.item in NEVER:
            assert "go on" not in choices
        if action.item == "made-safe.unplug" and question.kind == "tell":
            for rail in ("rail+", "rail-"):
                result = drive.state.result(f"made-safe.rails-low.{rail}")
                assert result is not None
                assert result.verdict == "pass"
                assert result.item not in drive.state.before

    def closed(self, event: Closed) -> None:
        state = self.drive.state
        assert event.count == len(self.drive.told) - 1
        verdicts = {result.item: result.verdict for result in state.results}
        if event.verdict == "pass":
            for item in self.drive.walk.plan.items:
                assert item.kind not in JUDGED_KINDS or verdicts[item.id] == "pass"
            assert not state.stopped
            assert not state.suspecting
            assert not self.drive.walk.suspects_a_fault(state)
        assert event.verdict == "undecided" or event.verdict == worst(verdicts.values())
        assert event.exit_status in (0, 1, 3, 4)
        assert (event.exit_status == 0) == (event.verdict == "pass" and not event.stopped)
        assert event.exit_status not in (3, 4) or event.stopped
        if state.stopped and state.ever_on:
            assert self.off_since_stop

    @property
    def over(self) -> bool:
        return self.drive.state.closed is not None

    @precondition(lambda self: not self.over)
    @rule(steps=st.integers(1, 25))
    def goes_well(self, steps: int) -> None:
        for _ in range(steps):
            if self.over:
                return
            self.answer_well()

    def answer_well(self) -> None:
        from tests.procedure.driver import good

        assert self.drive.open is not None
        self.tell(good(self.drive.walk, self.drive.state, self.drive.open))

    @precondition(lambda self: not self.over)
    @rule(number=st.integers(0, 20))
    def goes_badly(self, number: int) -> None:
        drive = self.drive
        assert drive.open is not None
        events = bad(drive.walk, drive.state, drive.open)
        if events:
            self.tell(events[number % len(events)])

    @precondition(lambda self: not self.over)
    @rule(number=st.integers(0, len(sudden()) - 1))
    def happens(self, number: int) -> None:
        self.tell(sudden()[number])

    @precondition(lambda self: not self.over and self.drive.asides)
    @rule(back=st.integers(1, 4), number=st.integers(0, 5))
    def the_model_answers(self, back: int, number: int) -> None:
        """An answer to what was asked of the model, lately or long ago, moves nothing and never stops the walk."""
        drive = self.drive
        asked = drive.asides[-min(back, len(drive.asides))]
        answers = aside(asked)
        before = drive.state
        try:
            self.tell(answers[number % len(answers)])
        except IllegalEvent:
            assert drive.state is before
            return
        assert (drive.state.index, drive.state.phase, drive.state.extra) == (before.index, before.phase, before.extra)
        assert drive.state.results == before.results

    @precondition(lambda self: not self.over)
    @rule()
    def takes_the_extra_reading(self) -> None:
        drive = self.drive
        if isinstance(drive.open, Ask) and any(choice.value == "probe" for choice in drive.open.question.choices):
            assert drive.walk.offer(drive.state) is not None
            self.tell(Decided(item=drive.open.item, choice="probe"))
            assert drive.state.extra == drive.state.extras[-1].id
            assert drive.walk.item(drive.state).powered <= drive.walk.host(drive.state).powered

    @rule(number=st.integers(0, 23))
    def says_what_is_not_taken(self, number: int) -> None:
        drive = self.drive
        event = every_event(drive.walk, drive.state)[number]
        if (drive.state.phase, type(event)) in TABLE and not isinstance(event, SupplySet):
            return
        before, snapshot = drive.state, copy.deepcopy(drive.state)
        if (drive.state.phase, type(event)) not in TABLE:
            with pytest.raises(IllegalEvent):
                drive.tell(event)
        assert drive.state is before
        assert before == snapshot

    def teardown(self) -> None:
        """The walk ends when it is answered, and its events give the same state again."""
        for _ in range(300):
            if self.over:
                break
            self.answer_well()
        assert self.over
        drive = self.drive
        assert drive.walk.replay(drive.told) == (drive.state, ())


TestWalks = Walks.TestCase
TestWalks.settings = settings(
    max_examples=40, stateful_step_count=25, deadline=None, suppress_health_check=list(HealthCheck), derandomize=True
)
