"""How the suspects study counts answers: with answers that were made up."""

from __future__ import annotations

import pytest

from benchkit.stage.faults import HEALTHY, Fault, parse_fault
from benchkit.stage.suspicion import Suspect, Suspicion
from tests.benchmarks.suspects_study import Tally, count, shortfalls

A, B, C, D, E = (parse_fault(f"{part}: open") for part in ("spreader.upper", "spreader.lower", "feed.upper",
                                                           "emitter.upper.1", "emitter.lower.1"))  # fmt: skip


def answer(*suspects: tuple[Fault, float, tuple[Fault, ...]], unseen: tuple[Fault, ...] = ()) -> Suspicion:
    said = tuple(Suspect(fault=fault, probability=p, alike=alike) for fault, p, alike in suspects)
    return Suspicion(suspects=said, probe_next=(), unseen=unseen, hypotheses=6, unsolved=(), seconds=0.0)


def test_first_in_three_and_missed() -> None:
    tally = Tally()
    said = answer((A, 0.6, (B,)), (C, 0.3, ()), (D, 0.1, ()), (E, 0.0, ()))
    for truth in (A, B, C, E):
        count(tally, "x", truth, said, [])
    assert (tally.planted, tally.first, tally.in_three, tally.unseen) == (4, 2, 3, 0)
    assert tally.share("first") == pytest.approx(0.5)
    assert len(tally.misses) == 2
    assert tally.log_probability[0] == pytest.approx(-0.5108, abs=1e-3)


def test_a_group_above_four_names_nothing() -> None:
    tally = Tally()
    count(tally, "x", B, answer((A, 1.0, (B, C, D, E))), [])
    assert (tally.first, tally.in_three) == (0, 0)


def test_unseen_is_counted_apart_only_when_nothing_showed() -> None:
    tally = Tally()
    said = answer((HEALTHY, 0.9, ()), (A, 0.1, ()), unseen=(B,))
    count(tally, "x", B, said, [])
    count(tally, "x", B, said, ["output"])
    assert (tally.planted, tally.unseen, tally.seen, tally.first) == (2, 1, 1, 0)
    assert "wrongly unseen" in tally.misses[0]


def test_false_alarms_and_shortfalls() -> None:
    tally = Tally()
    count(tally, "x", HEALTHY, answer((HEALTHY, 0.9, ())), [])
    count(tally, "x", HEALTHY, answer((HEALTHY, 0.9, ())), ["output"])
    count(tally, "x", HEALTHY, answer((A, 0.9, ())), [])
    assert (tally.healthy, tally.alarms, tally.out_of_limits) == (3, 2, 1)
    assert any("false alarms" in line for line in shortfalls({"one condition": tally}))
