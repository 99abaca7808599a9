from __future__ import annotations

import numpy as np
import pytest

from benchkit.errors import EntryError
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design
from benchkit.stage.draws import draw, nominal, seeds
from benchkit.stage.faults import FAULTS, HEALTHY, Fault, apply, faults_of, parse_fault, prior_of, row_of
from benchkit.stage.operate import solve_units
from benchkit.stage.points import parts_of
from tests.stage.designs import TERN, breadboard, changed, tern

LEAST = Condition(positive_v=15.0, negative_v=-15.0, limit_a=0.05, trimmer="least")
FULL = Condition(positive_v=35.0, negative_v=-35.0, limit_a=2.0, trimmer=0.5)


def test_words_are_the_fixed_ones() -> None:
    words = {(row.kind, row.fault) for row in FAULTS}
    assert words == (
        {("resistor", w) for w in ("open", "short", "ten times high", "ten times low", "swapped")}
        | {("trimmer", "wiper open")}
        | {
            ("transistor", w)
            for w in (
                "open", "collector open", "emitter open", "collector-emitter short", "base-emitter short",
                "base-collector short", "leaky", "reversed", "wrong polarity", "missing", "collector to heatsink",
            )
        }
        | {(k, w) for k in ("source", "servo") for w in ("dead", "stuck high", "stuck low")}
    )  # fmt: skip
    assert len(words) == len(FAULTS)


def test_every_row_states_a_prior_and_a_reason() -> None:
    for row in FAULTS:
        assert 0.0 < row.prior < 0.05
        assert row.reason
    for design in (tern(), breadboard()):
        assert sum(prior_of(design, fault) for fault in faults_of(design)) < 0.5


def test_faults_of_a_design() -> None:
    faults = {str(fault) for fault in faults_of(tern())}
    assert {
        "spreader.upper: swapped",
        "feed.upper: dead",
        "feed.lower: stuck high",
        "spreader.trimmer: wiper open",
    } <= faults
    assert "feed.upper: open" not in faults
    assert "driver.resistor: swapped" not in faults
    assert len(faults) == len(faults_of(tern()))
    assert "feed.upper: open" in {str(fault) for fault in faults_of(breadboard())}


@pytest.mark.parametrize(
    ("text", "fault"),
    [
        ("emitter.upper.1: open", Fault("emitter.upper.1", "open")),
        ("  Output.Upper.1 :  Collector-Emitter  Short ", Fault("output.upper.1", "collector-emitter short")),
        ("spreader.lower: swapped", Fault("spreader.upper", "swapped")),
    ],
)
def test_parse_fault(text: str, fault: Fault) -> None:
    assert parse_fault(text, tern()) == fault
    assert parse_fault(str(fault), tern()) == fault


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("emitter.upper.1", "a part and a fault"),
        ("emitter.upper.1: broken", "is no fault"),
        ("emiter.upper.1: open", "emitter.upper.1"),
        ("feed.upper: open", "dead, stuck high, stuck low"),
        ("emitter.upper.1: leaky", "is no fault of"),
    ],
)
def test_parse_fault_refuses(text: str, words: str) -> None:
    with pytest.raises(EntryError, match=words):
        parse_fault(text, tern())


def test_every_fault_converges_in_one_batch() -> None:
    faults = [fault for fault in faults_of(tern()) for _ in range(10)]
    solved = solve_units(tern(), draw(tern(), len(faults), seeds("unit", 3)), LEAST, faults, loading="none")
    assert solved.converged.all()


@pytest.mark.parametrize("design", [tern(), breadboard()], ids=lambda d: d.name)
def test_every_fault_changes_a_value(design: Design) -> None:
    """A fault that leaves all values as they are would never be found."""
    solved = solve_units(design, nominal(design), LEAST, loading="none")
    stage_only = {key: value for key, value in nominal(design).items() if key.startswith("spreader.trimmer.")}
    for fault in faults_of(design):
        values = {key: value.copy() for key, value in (solved.solution.values | stage_only).items()}
        apply(values, fault, design)
        before = solved.solution.values | stage_only
        assert any(
            not np.array_equal(values[key], np.broadcast_to(before[key], values[key].shape)) for key in values
        ), fault


def test_units_with_different_faults_keep_to_themselves() -> None:
    faults: list[Fault | None] = [None, Fault("emitter.upper.1", "ten times high"), HEALTHY]
    parameters = {key: np.broadcast_to(value, 3) for key, value in nominal(tern()).items()}
    solved = solve_units(tern(), parameters, FULL, faults, loading="none")
    alone = solve_units(tern(), nominal(tern()), FULL, faults[1], loading="none")
    drop = solved.points["emitter.upper.1"]
    assert drop[0] == pytest.approx(drop[2], rel=1e-9)
    assert drop[1] == pytest.approx(alone.points["emitter.upper.1"][0], rel=1e-6)
    assert drop[1] > 1.5 * drop[0]


# (fault, point, what the technician sees, as a test on reading and healthy reading)
@pytest.mark.parametrize(
    ("text", "point", "low", "high"),
    [
        ("emitter.upper.1: open", "emitter.lower.1", -1e-4, 1e-4),
        ("spreader.transistor: collector-emitter short", "spread", 0.0, 0.05),
        ("spreader.transistor: base-emitter short", "spread.lower", 0.0, 0.01),
        ("output.upper.1: base-emitter short", "output.upper.1.vbe", -0.1, 0.1),
        ("output.lower.1: base-collector short", "rail-.current", 0.049, 0.051),
        ("output.upper.1: collector to heatsink", "rail+.current", 0.049, 0.051),
        ("output.upper.1: collector to heatsink", "rail+", 0.0, 0.01),
        ("feed.upper: dead", "spread", -0.3, 0.9),
        ("feed.lower: dead", "output", 10.0, 15.0),
        ("feed.lower: stuck high", "output", -15.0, -10.0),
        ("feed.lower: stuck low", "output", 10.0, 15.0),
        ("spreader.trimmer: wiper open", "spread", 0.5, 0.9),
        ("spreader.transistor: missing", "rail+.current", 0.049, 0.051),
        ("driver.resistor: short", "driver.resistor", 0.0, 0.01),
    ],
)
def test_what_a_fault_looks_like(text: str, point: str, low: float, high: float) -> None:
    design = tern()
    solved = solve_units(design, nominal(design), LEAST, parse_fault(text, design), loading="none")
    assert solved.converged.all()
    assert low <= solved.points[point][0] <= high
    healthy = solve_units(design, nominal(design), LEAST, loading="none").points[point][0]
    if not (text.startswith("emitter") or text.startswith("output.upper.1: base-emitter")):
        assert not low <= healthy <= high


def test_open_wiper_follows_the_wiring() -> None:
    """Series: the arm opens and the spread falls to about one VBE; tied: the full track stays, the least-bias end."""
    fault = Fault("spreader.trimmer", "wiper open")

    def read(design: Design, with_fault: bool, point: str) -> float:
        return float(solve_units(design, nominal(design), LEAST, fault if with_fault else None).points[point][0])

    tied = changed(TERN, ('wiring = "series"', 'wiring = "tied"'))
    assert read(tern(), True, "spread") < 0.9
    assert read(tied, True, "spread") == pytest.approx(read(tied, False, "spread"), rel=5e-3)
    # In the upper arm, and where the wiper is the base's only way, an open wiper switches the spreader off.
    cooler = (('upper = "2.0 kohm 1 %"', 'upper = "1.5 kohm 1 %"'), ('lower = "560 ohm 1 %"', 'lower = "1 kohm 1 %"'))
    for arm in ("upper", "between"):
        design = changed(TERN, ('arm = "lower"', f'arm = "{arm}"'), *cooler)
        assert read(design, False, "rail+.current") < 0.03
        assert read(design, True, "rail+.current") == pytest.approx(0.05, rel=1e-3)


def test_wrong_polarity_and_reversed_differ_from_healthy() -> None:
    for word in ("wrong polarity", "reversed"):
        solved = solve_units(tern(), nominal(tern()), LEAST, Fault("driver.upper", word), loading="none")
        healthy = solve_units(tern(), nominal(tern()), LEAST, loading="none")
        changed_points = [
            name
            for name, value in solved.points.items()
            if abs(value[0] - healthy.points[name][0]) > 0.01 * abs(healthy.points[name][0]) + 1e-4
        ]
        assert changed_points, word


def test_a_faulty_unit_was_trimmed_healthy() -> None:
    condition = Condition(positive_v=35.0, negative_v=-35.0, limit_a=2.0, trimmer="target")
    healthy = solve_units(tern(), nominal(tern()), condition)
    fault = Fault("emitter.lower.1", "ten times high")
    faulty = solve_units(tern(), nominal(tern()), condition, fault)
    assert faulty.position == pytest.approx(healthy.position)
    assert faulty.points["emitter.lower.1"][0] > 1.2 * healthy.points["emitter.lower.1"][0]


def test_parts_and_rows_match() -> None:
    for part in parts_of(tern()):
        for fault in (f for f in faults_of(tern()) if f.part == part.name):
            assert row_of(tern(), fault).kind == part.kind
