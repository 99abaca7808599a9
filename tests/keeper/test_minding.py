"""Who is gone, and what is too old; the clocks are put in from outside."""

from __future__ import annotations

import pytest

from benchkit.keeper.minding import (
    FIRST_READING_S,
    SETTING_S,
    STANDSTILL_S,
    SUPPLY_AGE_S,
    UNASKED_TIMES,
    Freshness,
    Loss,
    Screen,
)
from benchkit.keeper.protocol import HEARTBEAT_LIMIT_S, IDLE_HEARTBEAT_LIMIT_S


class Computer:
    """Clocks and a parent that do what a test says."""

    def __init__(self) -> None:
        self.slept_s = 100.0
        self.parent: int | None = 42
        self.screen = Screen(0.0, lambda: self.slept_s, lambda: self.parent)

    def look(self, now_s: float, *, output_on: bool = False) -> Loss | None:
        return self.screen.look(now_s, output_on=output_on)


def test_all_is_well() -> None:
    computer = Computer()
    computer.screen.arm(0.0, on=True)
    for tick in range(100):
        computer.screen.beat(tick * 0.2)
        assert computer.look(tick * 0.2 + 0.1, output_on=True) is None


def test_heartbeats_count_only_once_armed() -> None:
    computer = Computer()
    on = computer.screen.look
    assert on(50.0, output_on=False) is None
    computer.screen.arm(50.0, on=True)
    assert on(50.0, output_on=True) is None
    assert on(50.0 + HEARTBEAT_LIMIT_S, output_on=True) is None
    lost = on(50.1 + HEARTBEAT_LIMIT_S, output_on=True)
    assert lost == Loss(who="the screen", problem="no heartbeat for 1.1 s", leaving=True)
    computer.screen.arm(60.0, on=False)
    assert computer.look(90.0) is None


def test_while_the_supply_is_off_heartbeats_may_be_late_for_longer() -> None:
    computer = Computer()
    computer.screen.arm(0.0, on=True)
    assert computer.look(IDLE_HEARTBEAT_LIMIT_S) is None
    lost = computer.look(0.1 + IDLE_HEARTBEAT_LIMIT_S)
    assert lost == Loss(who="the screen", problem="no heartbeat for 15.1 s", leaving=True)


def test_who_has_it_switched_on_is_there() -> None:
    """The last heartbeat may be old when the supply goes on: that was asked for, and counts as one."""
    computer = Computer()
    computer.screen.arm(0.0, on=True)
    assert computer.look(5.0) is None
    assert computer.look(5.1, output_on=True) is None
    assert computer.look(5.1 + HEARTBEAT_LIMIT_S, output_on=True) is None
    assert computer.look(5.2 + HEARTBEAT_LIMIT_S, output_on=True) is not None


def test_a_parent_that_is_gone() -> None:
    computer = Computer()
    computer.parent = 1
    lost = computer.look(0.1)
    assert lost is not None
    assert (lost.who, lost.leaving) == ("the screen", True)


def test_a_system_that_says_nothing_of_parents() -> None:
    screen = Screen(0.0, lambda: 0.0, lambda: None)
    assert screen.look(0.1, output_on=True) is None


@pytest.mark.parametrize(("armed", "output_on", "counts"), [(True, False, True), (False, True, True), (False,) * 3])
def test_a_suspension(armed: bool, output_on: bool, counts: bool) -> None:
    """The clock that goes on during suspension jumps; the other one has not moved."""
    computer = Computer()
    computer.screen.arm(0.0, on=armed)
    computer.slept_s += 3600.0
    lost = computer.look(0.05, output_on=output_on)
    assert (lost is not None) == counts
    if lost is not None:
        assert lost == Loss(who="the screen", problem="the computer slept for 3600 s")
    assert computer.look(0.1, output_on=output_on) is None, "it is told once"


def test_a_clock_that_wobbles_is_no_suspension() -> None:
    computer = Computer()
    computer.screen.arm(0.0, on=True)
    for tick in range(8):
        computer.slept_s += 0.1
        assert computer.look(tick * 0.1) is None


def test_a_keeper_that_stood_still_watched_nothing() -> None:
    computer = Computer()
    assert computer.look(0.5, output_on=True) is None
    assert computer.look(0.5 + STANDSTILL_S, output_on=True) is None
    lost = computer.look(2.0 + 2 * STANDSTILL_S, output_on=True)
    assert lost == Loss(who="the keeper", problem="the keeper stood still for 2.5 s and watched nothing")
    assert computer.look(2.1 + 2 * STANDSTILL_S, output_on=True) is None


def test_with_the_output_off_a_standstill_is_nobodys_business() -> None:
    assert Computer().look(100.0) is None


# -- instruments ----------------------------------------------------------------------------------------------------


def test_a_supply_that_is_not_watched_may_be_silent() -> None:
    fresh = Freshness()
    assert fresh.overdue(1e9) is None
    fresh.supply_heard(1.0)
    assert fresh.overdue(1e9) is None


def test_a_supply_that_is_watched_has_to_answer() -> None:
    fresh = Freshness()
    fresh.supply_from(10.0)
    assert fresh.overdue(10.0 + SUPPLY_AGE_S) is None
    fresh.supply_heard(12.0)
    assert fresh.overdue(12.0 + SUPPLY_AGE_S) is None
    lost = fresh.overdue(12.1 + SUPPLY_AGE_S)
    assert lost is not None
    assert lost.who == "the supply"
    fresh.supply_from(None)
    assert fresh.overdue(99.0) is None


def test_a_supply_that_is_being_set_has_its_time() -> None:
    """A slow one takes seconds for the many messages of a setting, in which nobody watches: not more than a few."""
    fresh = Freshness()
    fresh.supply_from(10.0)
    fresh.setting_begun(11.0)
    fresh.setting_begun(12.0)
    assert fresh.overdue(11.0 + SETTING_S) is None
    lost = fresh.overdue(11.1 + SETTING_S)
    assert lost is not None
    assert (lost.who, "a setting has taken it 5.1 s" in lost.problem) == ("the supply", True)
    fresh.setting_done(15.0)
    assert fresh.overdue(15.0 + SETTING_S) is None, "each setting has its own time"
    assert fresh.overdue(15.1 + SETTING_S) is not None
    fresh.setting_done(20.0)
    assert fresh.overdue(20.0 + SUPPLY_AGE_S) is None
    assert fresh.overdue(20.1 + SUPPLY_AGE_S) is not None


def test_a_setting_of_a_supply_that_is_not_watched_has_the_time_that_it_takes() -> None:
    fresh = Freshness()
    fresh.setting_begun(0.0)
    assert fresh.overdue(1e9) is None


def reading(fresh: Freshness, at_s: float, took_s: float, *, good: bool = True, samples: int = 1) -> None:
    fresh.reading_begun(at_s, samples)
    fresh.reading_done(at_s + took_s, good=good)


def test_a_meter_on_which_nothing_depends_may_be_silent() -> None:
    fresh = Freshness()
    reading(fresh, 0.0, 0.1)
    fresh.reading_begun(1.0)
    assert fresh.overdue(1e9) is None
    assert not fresh.meter_counts


def test_a_meter_that_was_asked_has_its_own_time_and_the_limit() -> None:
    fresh = Freshness()
    fresh.meter_from(0.0, 0.6)
    reading(fresh, 0.0, 0.2)
    reading(fresh, 0.5, 0.4)
    reading(fresh, 1.0, 0.1)
    fresh.reading_begun(2.0)
    assert fresh.overdue(2.99) is None
    lost = fresh.overdue(3.01)
    assert lost is not None
    assert lost.who == "the meter"
    assert "1.0 s ago" in lost.problem


def test_many_samples_take_their_time() -> None:
    fresh = Freshness()
    fresh.meter_from(0.0, 0.6)
    reading(fresh, 0.0, 0.2)
    fresh.reading_begun(1.0, samples=10)
    assert fresh.overdue(3.5) is None
    assert fresh.overdue(3.7) is not None
    fresh.reading_done(3.8, good=True)
    fresh.reading_begun(4.0)
    assert fresh.overdue(4.85) is None, "0.28 s a sample are not 2.8 s a reading"
    assert fresh.overdue(4.95) is not None


def test_the_first_reading_has_more_time() -> None:
    fresh = Freshness()
    fresh.meter_from(0.0, 0.6)
    fresh.reading_begun(0.1)
    assert fresh.overdue(0.6 + FIRST_READING_S) is None
    assert fresh.overdue(0.8 + FIRST_READING_S) is not None


def test_a_meter_that_nobody_asks_gets_old_too() -> None:
    fresh = Freshness()
    fresh.meter_from(0.0, 0.6)
    reading(fresh, 0.0, 0.0)
    assert fresh.overdue(UNASKED_TIMES * 0.6) is None
    lost = fresh.overdue(UNASKED_TIMES * 0.6 + 0.01)
    assert lost is not None
    assert "no fresh reading" in lost.problem


def test_a_failed_reading_is_not_fresh() -> None:
    fresh = Freshness()
    fresh.meter_from(0.0, 0.6)
    reading(fresh, 0.0, 0.0)
    for tick in range(1, 6):
        reading(fresh, tick * 0.6, 0.1, good=False)
    assert fresh.overdue(3.2) is not None
