"""What goes wrong in a rehearsal: the words for it, and what the bench makes of them."""

from __future__ import annotations

import itertools

import pytest

from benchkit.errors import EntryError
from benchkit.rehearsal.bench import RehearsalBench
from benchkit.rehearsal.mishaps import FOLDED_SHARE, OSCILLATION_A, Mishap, parse_mishap
from benchkit.rehearsal.strain import Burnt
from benchkit.stage.design import Design, parse_design
from benchkit.stage.faults import Fault
from tests.rehearsal.helpers import TERN, meter, power_up, supply, tell
from tests.stage.catalogue import few

WIPER_OPEN = Fault("spreader.trimmer", "wiper open")


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("emitter.upper.1: open", Mishap(fault=Fault("emitter.upper.1", "open"))),
        ("Driver.Upper:  base-emitter  short", Mishap(fault=Fault("driver.upper", "base-emitter short"))),
        ("spreader.trimmer: wiper open, after 3 turns", Mishap(fault=WIPER_OPEN, after_turns=3.0)),
        ("spreader.trimmer: wiper open after 1 turn", Mishap(fault=WIPER_OPEN, after_turns=1.0)),
        ("stage: oscillation", Mishap(trouble="oscillation")),
        ("Heat: runaway, after .5 turns", Mishap(trouble="runaway", after_turns=0.5)),
        ("supply: folds  back, after 2 turns", Mishap(trouble="folds back", after_turns=2.0)),
    ],
)  # fmt: skip
def test_mishaps_in_words(tern: Design, text: str, expected: Mishap) -> None:
    mishap = parse_mishap(text, tern)
    assert mishap == expected
    assert parse_mishap(str(mishap), tern) == mishap


@pytest.mark.parametrize(
    ("text", "said"),
    [("stage: hum", "stage: oscillation"), ("emitter.uper.1: open", r"emitter\.upper\.1"), ("", "no planted fault"),
     ("emitter.upper.1: open, after x turns", "is no fault")],
)  # fmt: skip
def test_what_cannot_go_wrong(tern: Design, text: str, said: str) -> None:
    with pytest.raises(EntryError, match=said):
        parse_mishap(text, tern)


def test_nothing_waits_for_a_screw_that_is_not_there() -> None:
    design = few()["feedback resistor resistor none 1"]
    with pytest.raises(EntryError, match="has no trimmer"):
        parse_mishap("emitter.upper.1: open, after 1 turn", design)


def test_a_wiper_that_opens_in_mid_trim_takes_the_bias_away(tern: Design) -> None:
    bench = RehearsalBench(tern, 1, "spreader.trimmer: wiper open, after 1.5 turns")
    bench.side({"do": "turn", "turns": 5.0})  # without power nothing is counted
    power_up(bench, 35.0, 0.5, travel=0.4)
    before = meter(bench, "emitter.upper.1")
    bench.side({"do": "turn", "turns": 1.0})
    assert meter(bench, "emitter.upper.1") > before
    bench.side({"do": "turn", "turns": 0.6})
    assert meter(bench, "emitter.upper.1") < 0.05 * before
    bench.side({"do": "turn", "turns": 2.0})
    assert meter(bench, "emitter.upper.1") < 0.05 * before, "no turn brings it back"
    assert bench.truth()["plant"] == "spreader.trimmer: wiper open, after 1.5 turns"


def test_a_fault_comes_when_the_hands_are_told_so(tern: Design) -> None:
    bench = RehearsalBench(tern, 1)
    power_up(bench, 35.0, 0.5, travel=0.4)
    before = meter(bench, "emitter.upper.1")
    bench.side({"do": "fault", "what": "spreader.trimmer: wiper open"})
    assert meter(bench, "emitter.upper.1") < 0.05 * before
    assert bench.truth()["plant"] == "spreader.trimmer: wiper open"
    with pytest.raises(EntryError, match="one fault at a time"):
        bench.side({"do": "fault", "what": "driver.upper: open"})
    with pytest.raises(EntryError, match="wiper open"):
        bench.side({"do": "fault", "what": None})


def test_an_oscillation_shows_in_a_c_and_in_the_rails_currents(tern: Design) -> None:
    quiet, swings = RehearsalBench(tern, 1), RehearsalBench(tern, 1, "stage: oscillation")
    stray, amps, drops = [], [], []
    for bench in (quiet, swings):
        power_up(bench, 35.0, 0.5, travel=0.4)
        stray.append(meter(bench, "output.ac", "MEAS:VOLT:AC?"))
        amps.append(supply(bench, "MEAS:CURR? (@1,2)"))
        drops.append(meter(bench, "emitter.upper.1"))
    assert 0.0001 < stray[0] < 0.001
    assert stray[1] > 0.1
    more_a = [with_it - without for without, with_it in zip(*amps, strict=True)]
    assert more_a == pytest.approx([OSCILLATION_A] * 2, abs=0.003)
    # More from the rails than through the emitter resistors: that is how it is told.
    assert abs(drops[1] - drops[0]) < 0.05 * 0.22 * OSCILLATION_A
    # 70 V x 60 mA are 4.2 W more into the output devices.
    powers = [sum(watts for name, watts in unit._powers(unit.latest).items() if "output." in name)
              for unit in (quiet.unit, swings.unit) if unit.latest is not None]  # fmt: skip
    assert powers[1] - powers[0] == pytest.approx(4.2, rel=0.05)


def test_ripple_shows_in_a_c_alone(tern: Design) -> None:
    bench = RehearsalBench(tern, 1, "stage: ripple")
    assert meter(bench, "output.ac", "MEAS:VOLT:AC?") < 1e-4, "without power there is none"
    power_up(bench, 35.0, 0.5, travel=0.4)
    assert meter(bench, "output.ac", "MEAS:VOLT:AC?") == pytest.approx(0.025, rel=0.1)
    assert meter(bench, "rail+.ac", "MEAS:VOLT:AC?") < 0.001


def test_a_runaway_rises_and_accelerates(tern: Design) -> None:
    bench = RehearsalBench(tern, 1)
    power_up(bench, 35.0, 2.0, travel=0.55, settle_s=100.0)
    drops = [meter(bench, "emitter.upper.1")]
    bench.side({"do": "fault", "what": "heat: runaway"})
    for _ in range(3):
        bench.table.advance(30.0)
        drops.append(meter(bench, "emitter.upper.1"))
    steps = [after - before for before, after in itertools.pairwise(drops)]
    assert all(after > before > 0.0 for before, after in itertools.pairwise(steps))
    assert drops[-1] > 1.5 * drops[0]


def test_a_supply_that_folds_back_in_mid_trim(tern: Design) -> None:
    bench = RehearsalBench(tern, 1, "supply: folds back, after 0.5 turns")
    power_up(bench, 35.0, 0.3, travel=0.5, settle_s=5.0)
    assert bench.supply.handle("STAT:QUES:COND? (@1,2)") == "0,0"
    bench.side({"do": "turn", "turns": 0.6})
    bench.table.advance(2.0)
    assert "1" in str(bench.supply.handle("STAT:QUES:COND? (@1,2)"))
    assert supply(bench, "CURR? (@1,2)") == (0.3, 0.3), "it shows what it was set to"
    assert max(supply(bench, "MEAS:CURR? (@1,2)")) <= FOLDED_SHARE * 0.3 + 0.002
    assert min(bench.table.rails.volts) < 34.0
    bench.table.fold(None)
    bench.table.advance(2.0)
    assert bench.supply.handle("STAT:QUES:COND? (@1,2)") == "0,0"


def test_a_probe_that_slips_floats_and_comes_back(tern: Design) -> None:
    bench = RehearsalBench(tern, 1)
    power_up(bench, 35.0, 0.5, travel=0.5, settle_s=5.0)
    on = meter(bench, "emitter.upper.1")
    moves = bench.table.probe_moves
    bench.side({"do": "slip", "seconds": 3.0})
    off = [float(str(bench.meter.handle("MEAS:VOLT:DC?"))) for _ in range(20)]
    assert max(off) - min(off) > 0.002, "it hums"
    assert abs(sum(off) / len(off)) < 0.25 * on
    assert float(str(bench.meter.handle("MEAS:RES?"))) > 9e37
    bench.table.advance(2.9)
    assert abs(float(str(bench.meter.handle("MEAS:VOLT:DC?"))) - on) > 0.2 * on
    bench.table.advance(0.2)
    assert float(str(bench.meter.handle("MEAS:VOLT:DC?"))) == pytest.approx(on, rel=0.05)
    assert bench.table.probe_moves == moves + 1
    with pytest.raises(EntryError, match="more than zero"):
        bench.side({"do": "slip", "seconds": 0.0})


def test_moving_the_probes_ends_a_slip(bench: RehearsalBench) -> None:
    power_up(bench, 15.0, 0.08)
    meter(bench, "rail+")
    bench.side({"do": "slip", "seconds": 60.0})
    assert meter(bench, "rail-") == pytest.approx(-15.0, abs=0.05)


def test_new_parts_make_it_well(tern: Design) -> None:
    bench = RehearsalBench(tern, 1, "output.upper.1: base-emitter short")
    power_up(bench, 15.0, 0.08, travel=0.3)
    assert meter(bench, "output.upper.1.vbe") < 0.1
    with pytest.raises(EntryError, match="supply off"):
        bench.side({"do": "repair"})
    tell(bench, "OUTP OFF,(@1,2)")
    others = {
        key: float(value.item()) for key, value in bench.unit.parameters.items() if not key.startswith("output.u")
    }
    assert bench.side({"do": "repair"}) == {"parts": ["output.upper.1"], "semiconductors": True}
    assert {key: float(bench.unit.parameters[key].item()) for key in others} == others
    tell(bench, "OUTP ON,(@1,2)")
    bench.table.advance(1.0)
    assert 0.3 < meter(bench, "output.upper.1.vbe") < 0.7
    assert bench.truth()["replaced"] == ["output.upper.1"]
    assert bench.truth()["plant"] == "output.upper.1: base-emitter short", "what it had stays known"


def test_burnt_parts_are_replaced_too(tern: Design) -> None:
    bench = RehearsalBench(tern, 1, "driver.resistor: short")
    bench.unit._break(Burnt("output.upper.1", "collector-emitter short", "too much", 0.0))
    assert bench.truth()["faulty"] == ["driver.resistor", "output.upper.1"]
    assert bench.side({"do": "repair"}) == {"parts": ["driver.resistor", "output.upper.1"], "semiconductors": True}
    assert bench.truth()["burnt_parts"] == 0
    power_up(bench, 35.0, 0.5, travel=0.3)
    assert bench.truth()["burnt_parts"] == 0
    assert 0.0 < bench.truth()["quiescent_a"] < 0.2


def test_two_that_were_swapped_are_both_put_right() -> None:
    bench = RehearsalBench(parse_design(TERN), 1, "spreader.lower: swapped")
    assert bench.side({"do": "repair"}) == {"parts": ["spreader.upper", "spreader.lower"], "semiconductors": False}
