from __future__ import annotations

import numpy as np
import pytest

from benchkit.errors import EntryError
from benchkit.stage.conditions import Unpowered
from benchkit.stage.design import Design
from benchkit.stage.draws import nominal
from benchkit.stage.faults import Fault, faults_of
from benchkit.stage.unpowered import COMPLIANCE_V, DIODE_RANGE, OHMS_RANGES, OVER_RANGE, solve_unpowered, waiting_time_s
from tests.stage.designs import BREADBOARD, TERN, breadboard, changed, tern


def read(design: Design, point: str, fault: Fault | None = None, trimmer: object = "least") -> float:
    readings = solve_unpowered(design, nominal(design), Unpowered(point=point, trimmer=trimmer), fault)  # type: ignore[arg-type]
    assert readings.converged.all()
    return float(readings.values[0])


def test_ranges_are_those_of_a_bench_meter() -> None:
    assert [r.amps for r in OHMS_RANGES[:3]] == [1e-3, 1e-3, 1e-4]
    assert all(r.full_scale * r.amps * OVER_RANGE < COMPLIANCE_V for r in OHMS_RANGES)
    assert DIODE_RANGE.amps == 1e-3


def test_arms_read_their_resistors() -> None:
    """Chosen polarities keep the junctions beside the arms off, so the meter sees resistors alone."""
    assert read(tern(), "ohm.spreader.upper") == pytest.approx(2000.0, rel=1e-4)
    assert read(tern(), "ohm.spreader.lower", trimmer="least") == pytest.approx(560.0 + 498.0, rel=1e-4)
    assert read(tern(), "ohm.spreader.lower", trimmer="most") == pytest.approx(560.0 + 2.0, rel=1e-4)
    assert read(tern(), "ohm.spreader.lower", trimmer=0.5) == pytest.approx(560.0 + 250.0, rel=1e-4)


def test_the_other_polarity_would_see_a_junction() -> None:
    """The base-emitter arm with red on the base reads low at 1 mA: the junction takes current."""
    design = changed(BREADBOARD, ('transistor = "npn-small"', 'transistor = "pnp-medium"'))
    assert read(design, "ohm.spreader.lower", trimmer="least") == pytest.approx(820.0 + 498.0, rel=1e-3)
    forward = read(tern(), "diode.spreader.transistor") / DIODE_RANGE.amps
    assert forward < 0.65 * 1058.0


def test_four_wire_readings() -> None:
    assert read(tern(), "ohm.emitter.upper.1") == pytest.approx(0.22, rel=1e-6)
    assert read(tern(), "ohm.emitter.lower.1", Fault("emitter.lower.1", "ten times high")) == pytest.approx(
        2.2, rel=1e-3
    )


def test_rails_see_bleeders_and_feeds() -> None:
    assert read(tern(), "ohm.rails") == pytest.approx(20e3, rel=1e-3)
    assert read(tern(), "ohm.rail+") == pytest.approx(10e3, rel=1e-3)
    # Feeds and arms in series: below the voltage at which a junction conducts there is nothing else.
    assert read(breadboard(), "ohm.rails", trimmer="least") == pytest.approx(2000.0 + 910.0 + 1318.0, rel=1e-3)
    assert read(breadboard(), "ohm.rail+") == np.inf


@pytest.mark.parametrize(
    ("text", "point", "low", "high"),
    [
        ("collector-emitter short", "ohm.output", 0.0, 10.1e3),
        ("collector to heatsink", "ohm.heatsink.output.upper.1", 0.0, 1.0),
        ("base-emitter short", "diode.output.upper.1", 0.0, 0.01),
        ("missing", "diode.output.upper.1", 0.6, np.inf),
        ("base-collector short", "ohm.rails", 0.0, 20e3),
    ],
)
def test_what_unpowered_faults_look_like(text: str, point: str, low: float, high: float) -> None:
    assert low <= read(tern(), point, Fault("output.upper.1", text)) <= high


def test_diodes_read_a_junction_each() -> None:
    for point, low, high in (
        ("diode.output.upper.1", 0.5, 0.6),
        ("diode.output.lower.1", 0.5, 0.6),
        ("diode.driver.upper", 0.55, 0.7),
        ("diode.spreader.transistor", 0.6, 0.7),
    ):
        assert low < read(tern(), point) < high


def test_insulation_reads_overload() -> None:
    assert read(tern(), "ohm.heatsink.output.lower.1") == np.inf
    assert read(tern(), "ohm.heatsink.driver.upper") == np.inf


def test_whole_fault_table_in_one_batch() -> None:
    faults = list(faults_of(breadboard()))
    parameters = nominal(breadboard())
    for point in ("ohm.rails", "ohm.spreader.lower", "diode.output.lower.1"):
        readings = solve_unpowered(breadboard(), parameters, Unpowered(point=point, trimmer=0.3), faults)
        assert readings.values.shape == (len(faults),)
        assert readings.converged.all()
        alone = read(breadboard(), point, faults[5], trimmer=0.3)
        assert readings.values[5] == pytest.approx(alone, rel=1e-5)


def test_a_point_that_is_not_there() -> None:
    with pytest.raises(EntryError, match="no test point"):
        read(breadboard(), "diode.driver.upper")


def test_waiting_time() -> None:
    """5 R C: 200 uF per rail pair in series are 50 uF across 20 kohm."""
    assert waiting_time_s(tern(), "ohm.rails") == pytest.approx(5 * 20e3 * 50e-6, rel=1e-3)
    assert waiting_time_s(tern(), "ohm.spreader.upper") == 0.0
    large = changed(TERN, ('local_capacitors = "100 uF"', 'reservoir = "10 mF"'))
    assert waiting_time_s(large, "ohm.rail+") == pytest.approx(5 * 10e3 * 10e-3, rel=1e-3)
    assert waiting_time_s(breadboard(), "ohm.rail+") > 10.0
