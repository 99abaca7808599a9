"""The supply: rails that the keeper moves at a real bench and the session in a rehearsal; entries by hand."""

from __future__ import annotations

import contextvars
import threading
from concurrent.futures import Future
from typing import Any

import hypothesis.strategies as st
import pytest
from hypothesis import given, settings

from benchkit.errors import EntryError
from benchkit.events import Noted, SupplySet, SupplyState
from benchkit.keeper.protocol import WatchLines
from benchkit.procedure.actions import SetSupply
from benchkit.session.clock import SimulatedClock
from benchkit.session.front import View
from benchkit.session.powering import (
    LEAST_SHARE,
    METER_AGE_REHEARSED_S,
    METER_AGE_S,
    OWN_WATCH_S,
    VOLTS_MORE_V,
    VOLTS_SHARE,
    typed_supply,
)
from benchkit.session.run import Session
from tests.procedure.driver import small
from tests.session.fakes import FakeFront, Run, quick_predictions

TWO = SetSupply(item="i", positive_v=5.0, negative_v=-5.0, limit_a=0.045)
ONE = SetSupply(item="i", positive_v=24.0, negative_v=0.0, limit_a=0.1)


@pytest.mark.parametrize(
    "text",
    [
        "5.00 V 21 mA -5.00 V 20 mA",
        "5.00V 21mA -5.00V 20mA",
        "5.00 V 21 mA 5.00 V 20 mA",
        "5.00 V, 21 mA, -5.00 V, 20 mA",
        "5.00 V 21 mA and -5.00 V 20 mA",
        "5000 mV 0.021 A -5 V -20 mA",
    ],
)
def test_two_rails(text: str) -> None:
    state = typed_supply(text, TWO)
    assert (state.output_on, state.positive_v, state.negative_v) == (True, 5.0, -5.0)
    assert state.positive_a == pytest.approx(0.021)
    assert state.negative_a == pytest.approx(0.020)
    assert not state.in_limit


def test_what_nobody_read_back_is_not_claimed() -> None:
    state = typed_supply("5 V 21 mA -5 V 20 mA", TWO)
    assert (state.set_positive_v, state.set_negative_v, state.limit_a) == (None, None, None)


@pytest.mark.parametrize(
    "text", ["5 V 45 mA -5 V 45 mA limit", "5 V 45 mA -5 V 45 mA in limit", "Limit 5V 45mA 5V 45mA"]
)
def test_in_limit(text: str) -> None:
    state = typed_supply(text, TWO)
    assert state.positive_in_limit
    assert state.negative_in_limit


def test_one_rail() -> None:
    state = typed_supply("24.1 V 55 mA limit", ONE)
    assert (state.positive_v, state.negative_v, state.negative_a) == (24.1, 0.0, 0.0)
    assert state.positive_in_limit
    assert not state.negative_in_limit


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "0 voltages and 0 currents came"),
        ("5 V", "1 voltages and 0 currents"),
        ("5 V 21 mA", "2 of each"),
        ("5 V 21 mA -5 V 20 mA 3 V", "3 voltages"),
        ("5 21", "'5' has no unit"),
        ("five volts", "'five' has no unit"),
        ("5 kg", "has no unit"),
        ("x V 21 mA -5 V 20 mA", "x V"),
        ("nan V 21 mA -5 V 20 mA", "nan"),
        ("5,0 V 21 mA -5 V 20 mA", "has no unit"),
    ],
)
def test_an_entry_that_is_none(text: str, words: str) -> None:
    with pytest.raises(EntryError) as caught:
        typed_supply(text, TWO)
    assert words in str(caught.value)
    assert caught.value.exit_status == 2


@settings(deadline=None)
@given(st.text(max_size=30))
def test_any_text_is_a_state_or_an_entry_error(text: str) -> None:
    try:
        state = typed_supply(text, TWO)
    except EntryError:
        return
    assert state.positive_v is not None
    assert state.negative_a is not None


@settings(deadline=None)
@given(st.floats(-99, 99), st.floats(0, 5), st.floats(0, 99), st.floats(0, 5))
def test_numbers_come_through(v1: float, a1: float, v2: float, a2: float) -> None:
    state = typed_supply(f"{v1:.6f} V {a1:.6f} A {-v2:.6f} V {a2:.6f} A", TWO)
    assert state.positive_v == pytest.approx(v1, abs=1e-6)
    assert state.negative_v == pytest.approx(-v2, abs=1e-6)
    assert state.positive_a == pytest.approx(a1, abs=1e-6)
    assert state.negative_a == pytest.approx(a2, abs=1e-6)


# -- rails ----------------------------------------------------------------------------------------------------------


@pytest.fixture
def quick(monkeypatch: pytest.MonkeyPatch) -> None:
    quick_predictions(monkeypatch)


class AtABench(Run):
    """A run whose keeper watches by itself, as at a real bench, with a clock that is in a hurry."""

    def make(self) -> Session:
        session = super().make()
        session.clock = SimulatedClock(self.advance, None)
        session.clock.own_watch = True
        return session


@pytest.mark.usefixtures("quick")
def test_at_a_bench_the_keeper_moves_the_rails() -> None:
    run = AtABench()
    closed = run.go()
    assert closed.exit_status == 0
    items = [item for item in small().plan.items if item.kind in ("supply", "limit check")]
    assert len(run.keeper.ramps) >= len(items)
    assert len(run.keeper.sets) == len(run.keeper.ramps), "nothing is set in slices"
    kept = [event for event in run.keeper.kept if isinstance(event, SupplySet)]
    assert [(ramp[0], ramp[1]) for ramp in run.keeper.ramps] == [
        (event.state.set_positive_v, event.state.set_negative_v) for event in kept
    ]
    assert any(view.busy_share == 0.5 for view in run.front.views), "the keeper's steps are shown"


@pytest.mark.usefixtures("quick")
def test_steps_are_shown_in_the_context_of_the_walk(monkeypatch: pytest.MonkeyPatch) -> None:
    """They come from a thread that knows nothing of the screen, which finds itself by its context."""
    screen: contextvars.ContextVar[str] = contextvars.ContextVar("screen")
    lost: list[str] = []

    class Front(FakeFront):
        def show(self, view: View) -> None:
            super().show(view)
            if screen.get("") != "here":
                lost.append(view.busy)

    run = AtABench()
    run.front = Front()
    ramp = run.keeper.supply_ramp

    def from_a_thread(*wanted: Any, **named: Any) -> Any:
        future: Future[SupplyState] = Future()
        threading.Thread(target=lambda: future.set_result(ramp(*wanted, **named).result())).start()
        return future

    monkeypatch.setattr(run.keeper, "supply_ramp", from_a_thread)
    screen.set("here")
    assert run.go().exit_status == 0
    assert any(view.busy_share == 0.5 for view in run.front.views)
    assert lost == []


@pytest.mark.usefixtures("quick")
def test_what_is_watched_for() -> None:
    run = AtABench()
    run.go()
    check, first, *others = run.keeper.ramps
    assert check[3] is None, "a limit that is checked into a short is meant to limit"
    assert check[2] == 0.0
    positive_v, negative_v, ramp_s, lines = first
    assert ramp_s > 0
    assert isinstance(lines, WatchLines)
    assert lines.positive_v == pytest.approx(VOLTS_SHARE * positive_v + VOLTS_MORE_V)
    assert lines.negative_v == pytest.approx(VOLTS_SHARE * -negative_v + VOLTS_MORE_V)
    assert (lines.trip_on_limit, lines.own_interval_s, lines.least_share) == (True, OWN_WATCH_S, LEAST_SHARE)
    for before, after in zip([first, *others], others, strict=False):
        assert after[3] is not None
        assert after[3].positive_v is not None
        assert after[3].positive_v > max(after[0], before[0] if after[0] < before[0] else 0.0)


@pytest.mark.usefixtures("quick")
@pytest.mark.parametrize("kind", [Run, AtABench])
def test_the_supplys_own_protection_is_set_with_the_rails(kind: type[Run]) -> None:
    run = kind()
    run.go()
    assert len(run.keeper.protections) == len(run.keeper.sets)
    first_limit_a = run.keeper.sets[0][2]
    for (positive_v, negative_v, limit_a), (protection_v, over_current) in zip(
        run.keeper.sets, run.keeper.protections, strict=True
    ):
        assert protection_v is None or min(protection_v) > max(positive_v, -negative_v)
        assert over_current == (limit_a != first_limit_a), "over-current protection would trip into the short"


@pytest.mark.usefixtures("quick")
@pytest.mark.parametrize(("kind", "limit_s"), [(Run, METER_AGE_REHEARSED_S), (AtABench, METER_AGE_S)])
def test_while_the_screw_is_turned_the_watch_depends_on_the_meter(kind: type[Run], limit_s: float) -> None:
    run = kind()
    run.go()
    assert run.keeper.minded == [limit_s, None]


@pytest.mark.usefixtures("quick")
def test_a_computer_that_may_sleep_is_a_caution_on_the_screen_and_in_the_record() -> None:
    run = AtABench()
    run.keeper.caution = "This computer may be suspended by itself."
    assert run.go().exit_status == 0
    noted = [event for event in run.keeper.kept if isinstance(event, Noted)]
    assert noted[0].text == "CAUTION: This computer may be suspended by itself."
    assert any("may be suspended" in view.message for view in run.front.views)


@pytest.mark.usefixtures("quick")
@pytest.mark.parametrize("kind", [Run, AtABench])
def test_a_computer_that_stays_awake_is_nothing_to_write_down(kind: type[Run]) -> None:
    run = kind()
    run.keeper.caution = "" if kind is AtABench else "A rehearsal asks for nothing."
    run.go()
    assert not any(isinstance(event, Noted) and "CAUTION" in event.text for event in run.keeper.kept)
