"""The stage driven into a dummy load: against a half sine added up point by point, and on the bench."""

from __future__ import annotations

import numpy as np
import pytest

from benchkit.errors import EntryError
from benchkit.rehearsal.bench import RehearsalBench
from benchkit.rehearsal.driving import HEADROOM_V, Drive
from benchkit.stage.design import Design
from tests.rehearsal.helpers import meter, power_up, supply
from tests.stage.catalogue import few


@pytest.mark.parametrize("share", [0.02, 1.0 / 3.0, 1.0])
def test_one_period_added_up(tern: Design, share: float) -> None:
    drive = Drive(tern, share)
    phase = (np.arange(20000) + 0.5) * 2.0 * np.pi / 20000
    amps = np.sqrt(share) * (35.0 - HEADROOM_V) / 8.22 * np.sin(phase)
    upper = np.maximum(amps, 0.0)
    # Half of the time each half carries the sine; its device has the rest of the rail's voltage across it.
    assert drive.mean_a(35.0, 35.0) == pytest.approx(upper.mean(), rel=1e-4)
    assert drive.output_rms_v(35.0, 35.0) == pytest.approx(np.sqrt(np.mean((8.0 * amps) ** 2)), rel=1e-4)
    assert drive.device_w(35.0, 35.0) == pytest.approx(np.mean((35.0 - 8.22 * amps) * upper), rel=1e-4)
    assert drive.resistor_w(35.0, 35.0, 0.22) == pytest.approx(np.mean(0.22 * upper**2), rel=1e-4)
    # What the rails give is what becomes heat and what the load gets.
    given_w = 2 * 35.0 * drive.mean_a(35.0, 35.0)
    load_w = drive.output_rms_v(35.0, 35.0) ** 2 / 8.0
    assert given_w == pytest.approx(2 * (drive.device_w(35.0, 35.0) + drive.resistor_w(35.0, 35.0, 0.22)) + load_w)


def test_low_rails_clip_the_sine(tern: Design) -> None:
    drive = Drive(tern, 1.0)
    assert drive.peak_a(20.0, 20.0) == pytest.approx((20.0 - HEADROOM_V) / 8.22)
    assert drive.peak_a(35.0, 20.0) == drive.peak_a(20.0, 20.0)
    assert drive.peak_a(2.0, 2.0) == 0.0


def test_a_single_supply_swings_about_its_middle() -> None:
    design = few()["double resistor servo upper tied 1 stopper one supply"]
    volts = design.rails.positive_v
    assert Drive(design, 1.0).peak_a(volts, 0.0) == pytest.approx((0.5 * volts - HEADROOM_V) / 8.22)


def test_rails_sag_until_the_limit_holds(tern: Design) -> None:
    drive = Drive(tern, 1.0)
    assert drive.rails_at((35.0, 35.0), 2.0) == (35.0, 35.0)
    sagged = drive.rails_at((35.0, 35.0), 0.2)
    assert sagged[0] < 35.0
    assert drive.mean_a(*sagged) == pytest.approx(0.2)


def test_a_driven_stage_draws_more_and_warms(tern: Design) -> None:
    bench = RehearsalBench(tern, 1)
    power_up(bench, 35.0, 2.0, travel=0.5, settle_s=5.0)
    idle, sink_c = supply(bench, "MEAS:CURR? (@1,2)"), bench.truth()["temperatures_c"]["heatsink"]
    drop_v = meter(bench, "emitter.upper.1")
    assert bench.side({"do": "drive", "share": 1.0 / 3.0}) is None
    bench.table.advance(0.02)  # before the junctions are warm, and the idle current with them
    drive = Drive(tern, 1.0 / 3.0)
    driven = supply(bench, "MEAS:CURR? (@1,2)")
    for rail in (0, 1):
        assert driven[rail] - idle[rail] == pytest.approx(drive.mean_a(35.0, 35.0), rel=0.02)
    assert meter(bench, "output.ac", "MEAS:VOLT:AC?") == pytest.approx(drive.output_rms_v(35.0, 35.0), rel=0.01)
    assert meter(bench, "emitter.upper.1") - drop_v == pytest.approx(0.22 * drive.mean_a(35.0, 35.0), rel=0.03)
    assert abs(meter(bench, "output")) < 0.05
    bench.table.advance(20.0)
    warm_c = bench.truth()["temperatures_c"]["heatsink"]
    # 2 x 14.7 W into 1.2 K/W and 400 J/K for 20 s: 35.3 K (1 - exp(-20/480)) = 1.44 K; the idle current of some
    # 40 mA at 35 V and more as it warms adds 2.8 W or more: from a tenth to a third of that.
    assert 1.44 < warm_c - sink_c < 1.44 * 1.4
    bench.side({"do": "drive", "share": 0})
    bench.table.advance(1.0)
    assert meter(bench, "output.ac", "MEAS:VOLT:AC?") < 0.001


def test_a_supply_in_its_limit_cannot_drive_it(tern: Design) -> None:
    bench = RehearsalBench(tern, 1)
    power_up(bench, 35.0, 0.3, travel=0.4, settle_s=5.0)
    bench.side({"do": "drive", "share": 0.5})
    bench.table.advance(3.0)
    assert "1" in str(bench.supply.handle("STAT:QUES:COND? (@1,2)"))
    assert max(supply(bench, "MEAS:CURR? (@1,2)")) <= 0.303
    assert min(bench.table.rails.volts) < 30.0
    bench.side({"do": "drive", "share": 0.0})
    bench.table.advance(3.0)
    assert bench.table.rails.volts == pytest.approx((35.0, 35.0), abs=0.1)


@pytest.mark.parametrize(("share", "load_ohm"), [(-0.1, 8.0), (1.5, 8.0), (0.5, 0.0)])
def test_no_such_drive(bench: RehearsalBench, share: float, load_ohm: float) -> None:
    with pytest.raises(EntryError):
        bench.side({"do": "drive", "share": share, "load_ohm": load_ohm})
