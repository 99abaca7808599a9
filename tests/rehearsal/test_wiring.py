"""The bench table: what supply and meter find, in the order in which a walk would ask."""

from __future__ import annotations

import itertools
import math
from dataclasses import replace

import pytest

from benchkit.errors import EntryError
from benchkit.rehearsal.bench import RehearsalBench
from benchkit.rehearsal.meter import OVERLOAD
from benchkit.rehearsal.strain import Burnt
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design, parse_design
from benchkit.stage.expected import expected, expected_unpowered
from tests.rehearsal.helpers import TERN, meter, power_up, supply, tell


def test_a_healthy_unit_reads_what_was_predicted_at_least_bias(tern: Design) -> None:
    condition = Condition(positive_v=15.0, negative_v=-15.0, limit_a=0.08, trimmer="least")
    limits = expected(tern, condition, units=400, seed=11)
    outside = total = 0
    for seed in range(2):
        bench = RehearsalBench(tern, seed)
        power_up(bench, 15.0, 0.08, settle_s=4.0)  # the servo needs three
        for point in limits.points:
            if point.point in ("heatsink", "rail+.drop", "rail-.drop"):
                continue
            question = "MEAS:CURR:DC?" if point.unit == "A" else "MEAS:VOLT:DC?"
            value = meter(bench, point.point, question)
            # The supply sets 15 V to within 0.05 % + 5 mV; predictions are for exactly 15 V.  Clips add a microvolt.
            allowed = 0.02 + 0.01 * abs(value) if point.point in ("rail+", "rail-") else 5e-6 + 0.003 * abs(value)
            outside += not point.low - allowed <= value <= point.high + allowed
            total += 1
    assert total > 30
    assert outside <= 0.05 * total


def test_a_healthy_unit_reads_what_was_predicted_unpowered(tern: Design) -> None:
    points = ["ohm.rails", "ohm.output", "ohm.spreader.upper", "ohm.spreader.lower", "ohm.emitter.upper.1",
              "diode.driver.upper", "diode.output.lower.1"]  # fmt: skip
    limits = expected_unpowered(tern, points, "least", units=300, seed=11)
    bench = RehearsalBench(tern, 3)
    bench.table.set_travel(0.0)
    for point in limits.points:
        question = "MEAS:FRES?" if point.unit == "ohm" else "MEAS:DIOD?"
        bench.table.probe(point.point)
        bench.table.advance(10.0)
        value = float(str(bench.meter.handle(question)))
        assert point.low - 0.01 - 3e-3 * point.low <= value <= point.high + 0.01 + 3e-3 * point.high, point.point


def test_before_it_is_connected_the_unit_sees_nothing(bench: RehearsalBench) -> None:
    tell(bench, "CURR 0.05,(@1,2)", "VOLT 15,(@1,2)", "OUTP ON,(@1,2)")
    bench.table.advance(1.0)
    assert supply(bench, "MEAS:VOLT? (@1,2)") == pytest.approx((15.0, 15.0), abs=0.03)
    assert supply(bench, "MEAS:CURR? (@1,2)") == pytest.approx((0.0, 0.0), abs=0.001)
    assert meter(bench, "rail+") == pytest.approx(0.0, abs=1e-4)
    assert bench.truth()["energy_j"] == 0.0


def test_the_limit_check_into_a_short(bench: RehearsalBench) -> None:
    bench.table.short(True)
    tell(bench, "CURR 0.05,(@1,2)", "VOLT 2,(@1,2)", "OUTP ON,(@1,2)")
    bench.table.advance(0.2)
    assert supply(bench, "MEAS:CURR? (@1,2)") == pytest.approx((0.05, 0.05), abs=0.002)
    assert supply(bench, "MEAS:VOLT? (@1,2)") == pytest.approx((0.0, 0.0), abs=0.02)
    assert bench.supply.handle("STAT:QUES:COND? (@1,2)") == "1,1"
    tell(bench, "OUTP OFF,(@1,2)")
    assert supply(bench, "MEAS:CURR? (@1,2)") == pytest.approx((0.0, 0.0), abs=0.001)
    assert bench.supply.handle("STAT:QUES:COND? (@1,2)") == "0,0"


def test_capacitors_charge_at_the_limit_and_then_leave_it(bench: RehearsalBench) -> None:
    # C*dV/dt: 100 uF at 50 mA less the unit's own current; without any it is 24 ms to 12 V (arithmetic).
    power_up(bench, 12.0, 0.05, settle_s=0.005)
    assert supply(bench, "MEAS:CURR? (@1,2)") == pytest.approx((0.05, 0.05), abs=0.002)
    assert bench.supply.handle("STAT:QUES:COND? (@1,2)") == "1,1"
    early_v = bench.table.rails.volts[0]
    assert 0.3 < early_v < 0.05 * 0.005 / 100e-6
    times_s = 0.005
    while not bench.table.rails.settled and times_s < 1.0:
        bench.table.advance(0.001)
        times_s += 0.001
    assert 0.024 < times_s < 0.1
    assert bench.supply.handle("STAT:QUES:COND? (@1,2)") == "0,0"
    assert meter(bench, "rail+") == pytest.approx(12.0, abs=0.02)
    assert meter(bench, "rail-") == pytest.approx(-12.0, abs=0.02)


def test_time_stands_still_between_advances(bench: RehearsalBench) -> None:
    power_up(bench, 12.0, 0.05, settle_s=0.005)
    before = bench.table.rails.volts
    for _ in range(5):
        supply(bench, "MEAS:VOLT? (@1,2)")
    assert bench.table.rails.volts == before
    assert bench.table.sim_s == 0.005


@pytest.mark.parametrize("plant", ["output.upper.1: collector to heatsink", "output.lower.1: collector to heatsink"])
def test_the_limit_holds_a_shorted_rail_down(tern: Design, plant: str) -> None:
    bench = RehearsalBench(tern, 1, plant)
    power_up(bench, 15.0, 0.05)
    rail = 0 if ".upper." in plant else 1
    assert abs(bench.truth()["rails_v"][rail]) < 0.1
    assert supply(bench, "MEAS:CURR? (@1,2)")[rail] == pytest.approx(0.05, abs=0.002)
    assert str(bench.supply.handle("STAT:QUES:COND? (@1,2)")).split(",")[rail] == "1"
    assert abs(bench.truth()["highest_rail_v"][rail]) < 1.0


@pytest.mark.parametrize(
    ("plant", "point"),
    [("spreader.lower: open", "spread"), ("emitter.upper.1: open", "emitter.upper.1"),
     ("feed.upper: dead", "spread"), ("output.upper.1: base-emitter short", "output.upper.1.vbe"),
     ("driver.resistor: ten times high", "rail+.current")],
)  # fmt: skip
def test_planted_faults_show(tern: Design, plant: str, point: str) -> None:
    values = []
    for bench in (RehearsalBench(tern, 1), RehearsalBench(tern, 1, plant)):
        power_up(bench, 15.0, 0.08, travel=0.35, settle_s=0.3)
        values.append(meter(bench, point, "MEAS:CURR:DC?" if point.endswith("current") else "MEAS:VOLT:DC?"))
    healthy, faulty = values
    assert abs(faulty - healthy) > 0.03 * abs(healthy)


def test_after_off_the_capacitors_empty_through_the_unit(bench: RehearsalBench) -> None:
    power_up(bench, 35.0, 0.1)
    tell(bench, "OUTP OFF,(@1,2)")
    assert supply(bench, "MEAS:CURR? (@1,2)") == pytest.approx((0.0, 0.0), abs=0.001)
    assert supply(bench, "MEAS:VOLT? (@1,2)") == pytest.approx((35.0, 35.0), abs=0.1)
    bench.table.advance(0.02)
    part_way = bench.table.rails.volts
    assert 20.0 < part_way[0] < 34.0
    bench.table.advance(5.0)
    assert meter(bench, "rail+") == pytest.approx(0.0, abs=0.02)


def test_the_drop_drifts_while_it_warms_up(bench: RehearsalBench) -> None:
    power_up(bench, 35.0, 0.5, travel=0.45)
    readings = [meter(bench, "emitter.upper.1")]
    for _ in range(8):
        bench.table.advance(150.0)
        readings.append(float(str(bench.meter.handle("MEAS:VOLT:DC?"))))
    steps = [abs(b - a) for a, b in itertools.pairwise(readings)]
    assert max(steps[:3]) > 0.001
    assert steps[-1] < 0.2 * max(steps)
    assert meter(bench, "heatsink", "MEAS:TEMP?") > 27.0


def test_turning_the_screw_shows_at_once(bench: RehearsalBench) -> None:
    power_up(bench, 35.0, 0.5, travel=0.3)
    before = meter(bench, "emitter.upper.1")
    bench.table.turn(1.0)
    assert float(str(bench.meter.handle("MEAS:VOLT:DC?"))) > 1.3 * before
    bench.table.turn(-1.0)
    assert float(str(bench.meter.handle("MEAS:VOLT:DC?"))) == pytest.approx(before, rel=0.01, abs=5e-6)


def test_the_wrong_function_reads_what_it_would_on_a_bench(bench: RehearsalBench) -> None:
    assert meter(bench, None, "MEAS:RES?") == OVERLOAD
    assert meter(bench, None, "MEAS:TEMP?") == OVERLOAD
    assert 0.0 < abs(meter(bench, None)) < 0.02
    assert meter(bench, "ohm.rails") == pytest.approx(0.0, abs=1e-4)  # volts on an empty circuit
    proper = meter(bench, "ohm.emitter.upper.1", "MEAS:FRES?")
    assert proper == pytest.approx(0.22, rel=0.03)
    assert meter(bench, "emitter.upper.1", "MEAS:FRES?") == pytest.approx(proper, abs=1e-3)  # the same clips
    assert meter(bench, "heatsink") == pytest.approx(0.0, abs=0.02)
    power_up(bench, 15.0, 0.08)
    # Ohms on a live rail: the voltage over the test current of 1 mA, and nothing like a resistance.
    assert meter(bench, "rail+", "MEAS:RES?") > 12e3
    assert meter(bench, "output.upper.1.vbe", "MEAS:DIOD?") != pytest.approx(0.5, abs=0.1)
    assert meter(bench, "output.ac", "MEAS:VOLT:AC?") < 0.003
    assert meter(bench, "rail+.current", "MEAS:CURR:DC?") == pytest.approx(
        supply(bench, "MEAS:CURR? (@1)")[0], abs=0.001
    )


def test_ohms_on_charged_capacitors_is_wrong_until_they_are_empty(bench: RehearsalBench) -> None:
    bench.table.probe("ohm.rail+")
    bench.table.advance(10.0)
    proper = float(str(bench.meter.handle("MEAS:RES?")))
    power_up(bench, 35.0, 0.1)
    tell(bench, "OUTP OFF,(@1,2)")
    bench.table.connect(False)
    assert abs(meter(bench, "ohm.rail+", "MEAS:RES?")) > 3.0 * proper
    bench.table.advance(10.0)
    assert float(str(bench.meter.handle("MEAS:RES?"))) == pytest.approx(proper, rel=0.02)


def test_capacitors_make_ohms_count_up(bench: RehearsalBench) -> None:
    bench.table.probe("ohm.rails")
    first = float(str(bench.meter.handle("MEAS:RES?")))
    readings = []
    for _ in range(10):
        bench.table.advance(1.0)
        readings.append(float(str(bench.meter.handle("MEAS:RES?"))))
    assert first < 0.9 * readings[-1]
    assert readings[-1] == pytest.approx(readings[-2], rel=1e-3)


def test_a_voltmeter_loads_the_point(bench: RehearsalBench) -> None:
    power_up(bench, 15.0, 0.08)
    bench.table.probe("spread.upper")
    bare_v = float(bench.table.now().points["spread.upper"][0])
    sensed_v = bench.table.sense("dc volts", None).value
    # 2 kohm beside 10 Mohm: at most 0.02 %, and never upwards.
    assert 1e-6 < 1.0 - sensed_v / bare_v < 3e-4


def test_an_hour_at_idle_ends_where_short_steps_end(tern: Design) -> None:
    results = []
    for slices in (1, 40):
        bench = RehearsalBench(tern, 1)
        power_up(bench, 35.0, 0.5, travel=0.4)
        for _ in range(slices):
            bench.table.advance(1200.0 / slices)
        results.append(bench.truth()["drops_v"]["emitter.upper.1"])
    assert results[0] == pytest.approx(results[1], rel=1e-3)


def test_energy_is_what_the_supply_delivered(bench: RehearsalBench) -> None:
    power_up(bench, 15.0, 0.08, settle_s=2.0)
    before_j = bench.truth()["energy_j"]
    amps = [float(bench.table.now().points[f"{rail}.current"][0]) for rail in ("rail+", "rail-")]
    bench.table.advance(10.0)
    assert bench.truth()["energy_j"] - before_j == pytest.approx(10.0 * 15.0 * sum(amps), rel=0.01)


@pytest.mark.parametrize("seconds", [-1.0, math.nan, math.inf])
def test_time_does_not_go_backwards(bench: RehearsalBench, seconds: float) -> None:
    with pytest.raises(EntryError):
        bench.table.advance(seconds)


def test_the_clips_only_go_where_there_is_a_point(bench: RehearsalBench) -> None:
    with pytest.raises(EntryError, match="no test point"):
        bench.table.probe("emitter.upper.9")


BIG = TERN.replace('local_capacitors = "100 uF"', 'local_capacitors = "100 uF"\nreservoir = "22 mF"')


def test_the_limit_does_not_contain_what_the_capacitors_hold() -> None:
    """The same slip of the screw, the same limit: with 22 mF on each rail (13 J) there is more to burn with."""
    hottest = []
    for text in (TERN, BIG):
        bench = RehearsalBench(parse_design(text), 1)
        power_up(bench, 35.0, 0.2, travel=0.3, settle_s=20.0)
        assert bench.table.rails.volts == pytest.approx((35.0, 35.0), abs=0.1)
        before_j = bench.truth()["energy_j"]
        bench.table.set_travel(1.0)
        spots = []
        for _ in range(40):
            bench.table.advance(0.02)
            spots.append(max(bench.unit.strain.hot_spots_c(bench.unit.warmth.temperatures_c()).values()))
        hottest.append(max(spots))
        # The supply itself delivered no more than its limit.
        assert bench.truth()["energy_j"] - before_j <= 0.8 * 2 * 0.2 * 35.0 * 1.02
    assert hottest[1] > hottest[0] + 12.0


def test_capacitors_beat_the_limit_when_a_device_shorts() -> None:
    """A device that shorts at full rails: its emitter resistor takes what the reservoir holds, whatever the limit."""
    peaks = []
    for text in (TERN, BIG):
        bench = RehearsalBench(parse_design(text), 1)
        power_up(bench, 35.0, 0.1, settle_s=30.0)
        shorted = Burnt("output.upper.1", "collector-emitter short", "a slip", 0.0)
        bench.unit._break(shorted)
        bench.unit._break(replace(shorted, part="output.lower.1"))
        bench.table._disturb()
        bench.table.advance(0.05)
        peaks.append(max(bench.unit.strain._average_w))
    # Two rails, 22 mF at 35 V: 27 J, of which an emitter resistor takes 0.22 ohm of twice (0.22 + 0.05) ohm, averaged
    # over its time constant of 4 s (arithmetic: 2.8 W).
    assert peaks[1] == pytest.approx(22.1e-3 * 35.0**2 * 0.22 / 0.54 / 4.0, rel=0.15)
    assert peaks[0] < 0.1 * peaks[1]


def test_a_second_look_finds_what_came_back() -> None:
    bench = RehearsalBench(parse_design(BIG), 1)
    power_up(bench, 35.0, 0.5, settle_s=300.0)
    tell(bench, "OUTP OFF,(@1,2)")
    while max(bench.table.rails.volts) > 0.0:
        bench.table.advance(1.0)
    first = meter(bench, "rail+")
    assert abs(first) < 0.05
    bench.table.advance(60.0)
    assert 0.1 < meter(bench, "rail+") < 1.5
    assert -1.5 < meter(bench, "rail-") < -0.1
    assert meter(bench, "output") == pytest.approx(0.0, abs=1e-3)
    assert 0.2 < meter(bench, "ohm.rails") < 3.0  # volts from rail to rail
    assert bench.truth()["rails_v"][0] > 0.1
    # Ohms over a voltage: that voltage over the test current of 1 mA comes on top.
    assert meter(bench, "ohm.rail+", "MEAS:RES?") > 0.9 * bench.truth()["rails_v"][0] / 0.001
    small = RehearsalBench(parse_design(TERN), 1)
    power_up(small, 35.0, 0.5, settle_s=300.0)
    tell(small, "OUTP OFF,(@1,2)")
    small.table.advance(65.0)
    assert meter(small, "rail+") == pytest.approx(0.0, abs=1e-3)


def test_over_current_protection_ends_a_short(tern: Design) -> None:
    bench = RehearsalBench(tern, 1, "output.upper.1: collector to heatsink")
    tell(bench, "CURR:PROT:DEL 0.5,(@1,2);:CURR:PROT:STAT ON,(@1,2)")
    power_up(bench, 15.0, 0.05, settle_s=0.3)
    assert bench.supply.handle("OUTP? (@1,2);:CURR:PROT:TRIP? (@1,2)") == "1,1;0,0"
    bench.table.advance(0.4)
    assert bench.supply.handle("OUTP? (@1,2);:CURR:PROT:TRIP? (@1,2)") == "0,1;1,0"
    assert bench.table.channels[0].on is False


def test_over_voltage_protection_knows_the_capacitors(bench: RehearsalBench) -> None:
    power_up(bench, 20.0, 0.1)
    tell(bench, "OUTP OFF,(@1,2)")
    tell(bench, "VOLT:PROT 12,(@1,2)", "VOLT 5,(@1,2)")
    assert bench.supply.handle("VOLT:PROT:TRIP? (@1,2)") == "0,0", "an output that is off has nothing to trip"
    tell(bench, "OUTP ON,(@1,2)")
    assert bench.supply.handle("VOLT:PROT:TRIP? (@1,2);:OUTP? (@1,2)") == "1,1;0,0"


def test_a_burnt_unit_says_so(tern: Design) -> None:
    bench = RehearsalBench(tern, 1, "driver.resistor: short")
    assert "No part of it was burnt" in bench.truth()["words"]
    power_up(bench, 35.0, 5.0, travel=0.5, settle_s=5.0)
    truth = bench.truth()
    assert truth["burnt_parts"] >= 1
    assert {part.partition(".")[0] for part in truth["broken"]} <= {"driver", "output", "stopper", "emitter"}
    assert truth["burnt"][0] in truth["words"]
    before = truth["broken"]
    tell(bench, "OUTP OFF,(@1,2)")
    bench.table.set_travel(0.0)
    bench.table.advance(60.0)
    power_up(bench, 15.0, 0.08)
    assert bench.truth()["broken"] == before, "what burnt stays burnt"
    assert str(bench.supply.handle("STAT:QUES:COND? (@1,2)")) != "0,0"
