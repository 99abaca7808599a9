from __future__ import annotations

import math
from dataclasses import replace

import pytest

from benchkit.errors import FileError
from benchkit.procedure.file import load_procedure, parse_procedure
from benchkit.procedure.items import NEVER_PASSED_OVER, RAIL_LOW_V, Item, Joined, Plan, condition_key
from benchkit.procedure.plan import make_plan
from benchkit.procedure.sizing import discharge_s, rails_text, supply_limit_a
from benchkit.stage.conditions import Condition, Unpowered
from benchkit.stage.design import Design, parse_design
from benchkit.stage.draws import draw, seeds
from benchkit.stage.operate import solve_units
from benchkit.stage.trimmer import full_rails
from tests.procedure.driver import SHIPPED, SMALL, item_of, shipped, small
from tests.stage.catalogue import Wanted, text
from tests.stage.designs import BREADBOARD, TERN, breadboard, changed, tern

DESIGNS = ("tern-40", "breadboard")

HEAD = """
[procedure]
format = 1
name = "n"
purpose = "p"
"""
SAFE = """
[[section]]
name = "made-safe"
title = "t"
[[section.step]]
name = "off"
kind = "off"
title = "t"
[[section.step]]
name = "low"
kind = "measure"
title = "t"
points = ["rail+", "rail-"]
limits = { low = "-1 V", high = "1 V" }
"""
CHECKS = """
[[section]]
name = "checks"
title = "t"
resume = true
[[section.step]]
name = "least"
kind = "tell"
title = "t"
do = "d"
act = "trimmer to least"
[[section.step]]
name = "ohms"
kind = "measure"
title = "t"
points = ["ohm.spreader.ARM"]
limits = "the model"
[[section.step]]
name = "rails"
kind = "measure"
title = "t"
points = ["ohm.rails"]
limits = "the model"
[[section.step]]
name = "limit"
kind = "limit check"
title = "t"
rails = "2 V"
limit = "20 mA"
"""
POWER = 'name = "on"\nkind = "supply"\ntitle = "t"\nrails = "full"\nlimit = "20 mA"'


def plan_of(*steps: str, design: Design | None = None) -> Plan:
    """The plan of a procedure with these steps in one section."""
    body = "".join(f"[[section.step]]\n{step}\n" for step in steps)
    checks = CHECKS if 'kind = "supply"' in body and (design is None or design.spreader.trimmer is not None) else ""
    text = f'{HEAD}\n{checks}\n[[section]]\nname = "s"\ntitle = "t"\nresume = true\n{body}{SAFE}'
    return make_plan(parse_procedure(text, "mine.toml"), design or breadboard())


@pytest.mark.parametrize(
    ("gone", "words"), [("limit", "limit check"), ("rails", "ohm.rails"), ("ohms", "ohm.spreader.ARM")]
)
def test_no_procedure_gives_power_before_the_checks(gone: str, words: str) -> None:
    steps = CHECKS.split("[[section.step]]")
    kept = "[[section.step]]".join(step for step in steps if f'name = "{gone}"' not in step)
    text = f'{HEAD}\n{kept}\n[[section]]\nname = "s"\ntitle = "t"\nresume = true\n[[section.step]]\n{POWER}\n{SAFE}'
    with pytest.raises(FileError, match="before the unit is known to be safe") as caught:
        make_plan(parse_procedure(text, "mine.toml"), breadboard())
    assert words in caught.value.expected


# -- the whole ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", DESIGNS)
def test_ids_are_unique_and_the_way_out_is_last(name: str) -> None:
    plan = shipped(name)
    ids = [item.id for item in plan.items]
    assert len(ids) == len(set(ids)) == len(plan)
    assert plan.items[plan.made_safe].kind == "off"
    assert {item.section for item in plan.items[plan.made_safe :]} == {"made-safe"}
    assert plan.items[plan.resume].section == "cold"
    assert plan.items[plan.resume - 1].section != "cold"


@pytest.mark.parametrize("name", DESIGNS)
def test_a_hold_point_stands_before_whatever_raises(name: str) -> None:
    plan = shipped(name)
    volts = limit_a = 0.0
    seen = 0
    for before, item in zip(plan.items, plan.items[1:], strict=False):
        if item.kind == "off":
            volts = limit_a = 0.0
        if item.kind not in ("supply", "limit check"):
            continue
        raises = item.positive_v > volts or item.limit_a > limit_a
        assert item.raises == raises
        assert not raises or before.kind == "hold", item.id
        volts, limit_a = item.positive_v, item.limit_a
        seen += raises
    assert seen == 8 + 3  # three of them only where the stage is driven: load on, room for the drive, load off


@pytest.mark.parametrize("name", DESIGNS)
def test_the_order_of_first_power(name: str) -> None:
    """Cold checks, the limit tried into a short, the unit connected, and only then power."""
    plan = shipped(name)
    where = {item.id: number for number, item in enumerate(plan.items)}
    powered = next(number for number, item in enumerate(plan.items) if item.kind == "supply")
    order = [
        "look.load",
        "look.polarity",
        "cold.stored.rail+",
        "cold.trimmer-least",
        next(item.id for item in plan.items if item.trimmer_end),
        "cold.rail-to-rail.ohm.rails",
        "limit.short",
        "limit.limit-check.hold",
        "limit.limit-check",
        "limit.limit-check.off",
        "limit.connect",
        "limit.clip-output",
        "low-rails.ready",
    ]
    numbers = [where[item] for item in order]
    assert numbers == sorted(numbers)
    assert numbers[-1] == powered - 1
    assert plan.items[powered + 1].id == "low-rails.output-first.output"
    offset = next(number for number, item in enumerate(plan.items) if item.rule == "offset before load")
    trim = next(number for number, item in enumerate(plan.items) if item.kind == "trim")
    assert offset < trim


@pytest.mark.parametrize("name", DESIGNS)
def test_readings_know_their_condition(name: str) -> None:
    on, trimmer = False, "unknown"
    rails = (0.0, 0.0)
    for item in shipped(name).items:
        if item.kind == "supply":
            on, rails = True, (item.positive_v, item.negative_v)
        elif item.kind == "off":
            on = False
        elif item.act == "trimmer to least":
            trimmer = "least"
        elif item.kind == "trim":
            trimmer = "target"
        if item.kind != "measure":
            continue
        assert item.point is not None
        if isinstance(item.condition, Unpowered):
            assert not on
            assert item.condition.trimmer == trimmer
        elif item.condition is not None:
            assert on
            joined = item.condition.conditions if isinstance(item.condition, Joined) else (item.condition,)
            for condition in joined:
                assert (condition.positive_v, condition.negative_v) == rails
                assert condition.trimmer == trimmer
        else:
            assert item.limits is not None


@pytest.mark.parametrize(("pairs", "full"), [(1, False), (3, True)])
def test_the_first_limit_leaves_room_for_healthy_units_of_several_pairs(pairs: int, full: bool) -> None:
    wanted = Wanted(
        topology="double-emitter-follower",
        feed="source servo",
        trimmer="lower",
        pairs=pairs,
        stopper=full,
        to_output=full,
    )
    design = parse_design(text(wanted), wanted.name)
    plan = make_plan(load_procedure(SHIPPED), design)
    limit_a = next(item.limit_a for item in plan.items if item.kind == "supply")
    units = draw(design, 150, seeds("unit", 7))  # not the units that the limit was made from
    for when in ("cold", "warm"):
        solved = solve_units(design, units, full_rails(design, trimmer="least", when=when), loading="none")
        assert solved.converged.all()
        assert float(solved.points["rail+.current"].max()) < limit_a
    assert limit_a < supply_limit_a(design, 30.0, -30.0, share=1.0)


def test_the_warm_readings_are_warm_and_at_the_target() -> None:
    for item in shipped("tern-40").items:
        if item.section == "warm" and item.kind == "measure":
            if item.point is not None and item.point.name == "emitter.upper.1":
                assert item.limits is not None  # it was set to the target, which is what it is judged by
                assert item.limits.nominal == pytest.approx(22e-3)
                continue
            if item.point is not None and item.point.name == "output.ac":
                assert item.limits is not None  # the model says nothing of it
                continue
            assert isinstance(item.condition, Joined)
            assert {one.when for one in item.condition.conditions} == {"warm"}
            shares = [one.target_share for one in item.condition.conditions]
            assert shares == pytest.approx([1.0, 0.9, 1.1])


def test_a_stage_that_has_been_powered_is_anywhere_from_cold_to_warm() -> None:
    (item,) = [one for one in shipped("tern-40").items if one.id == "up.output-full.output"]
    assert isinstance(item.condition, Joined)
    assert {one.when for one in item.condition.conditions} == {"cold", "warm"}


# -- points ---------------------------------------------------------------------------------------------------------


def points(plan: Plan, step: str) -> list[str]:
    return [item.point.name for item in plan.items if item.id.startswith(step) and item.point is not None]


def test_capital_words_stand_for_all_that_the_design_has() -> None:
    plan = shipped("tern-40")
    assert points(plan, "cold.junctions") == [
        "diode.spreader.transistor", "diode.driver.upper", "diode.driver.lower", "diode.output.upper.1",
        "diode.output.lower.1",
    ]  # fmt: skip
    assert points(plan, "cold.trimmer-end") == ["ohm.spreader.lower"]


def test_two_pairs_have_two_readings() -> None:
    two = changed(BREADBOARD, ("pairs = 1", "pairs = 2"))
    step = 'name = "m"\nkind = "measure"\ntitle = "t"\npoints = ["ohm.emitter.upper.N"]\nlimits = "the model"'
    assert points(plan_of(step, design=two), "s.m") == ["ohm.emitter.upper.1", "ohm.emitter.upper.2"]


@pytest.mark.parametrize(("arm", "expected"), [("lower", "ohm.spreader.lower"), ("upper", "ohm.spreader.upper")])
def test_the_arm_is_the_trimmers(arm: str, expected: str) -> None:
    design = changed(BREADBOARD, ('arm = "lower"', f'arm = "{arm}"'))
    step = 'name = "m"\nkind = "measure"\ntitle = "t"\npoints = ["ohm.spreader.ARM"]\nlimits = "the model"'
    least = 'name = "least"\nkind = "tell"\ntitle = "t"\ndo = "d"\nact = "trimmer to least"'
    plan = plan_of(least, step, design=design)
    assert points(plan, "s.m") == [expected]
    (item,) = [one for one in plan.items if one.trimmer_end]
    assert not item.may_go_on


def test_a_rule_that_the_design_cannot_have_is_left_out() -> None:
    rules = {name: {item.rule for item in shipped(name).items} for name in DESIGNS}
    assert "feed symmetry" in rules["breadboard"]
    assert "feed symmetry" not in rules["tern-40"]


# -- what a file can't allow ----------------------------------------------------------------------------------------


@pytest.mark.parametrize("point", ["ohm.spreader.ARM", *sorted(NEVER_PASSED_OVER - {"offset before load"})])
def test_a_file_cannot_allow_what_nobody_passes_over(point: str) -> None:
    step = f'name = "m"\nkind = "measure"\ntitle = "t"\npoints = ["{point}"]\nlimits = "the model"\noverride = true'
    least = 'name = "least"\nkind = "tell"\ntitle = "t"\ndo = "d"\nact = "trimmer to least"'
    (item,) = [one for one in own(plan_of(least, step)) if one.kind == "measure"]
    assert not item.may_go_on


def test_nor_the_offset() -> None:
    step = 'name = "r"\nkind = "rule"\ntitle = "t"\nrule = "offset before load"\nnumber = "50 mV"\noverride = true'
    (item,) = [one for one in plan_of(POWER, step).items if one.kind == "rule"]
    assert not item.may_go_on
    assert item.number == pytest.approx(0.05)


MEASURE = 'name = "m"\nkind = "measure"\ntitle = "t"\n'
TRIM = 'name = "m"\nkind = "trim"\ntitle = "t"\npoints = ["emitter.upper.1"]\nshare = "25 %"'
RULE = 'name = "r"\nkind = "rule"\ntitle = "t"\nrule = "divider stiffness"\n'


@pytest.mark.parametrize(
    ("steps", "words"),
    [
        ((f'{MEASURE}points = ["output"]\nlimits = "the model"',), "output against the model while the supply is off"),
        ((POWER, f'{MEASURE}points = ["ohm.rails"]\nlimits = "the model"'), "ohm.rails while the supply is on"),
        ((TRIM,), "trims while the supply is off"),
        ((f'{MEASURE}points = ["ohm.rails"]\nlimits = {{ low = "1 ohm" }}',), "limits of its own"),
        ((f'{MEASURE}points = ["ohm.output"]\nlimits = {{ low = "2 ohm", high = "1 ohm" }}',), "upside down"),
        ((POWER.replace('"full"', '"36 V"'),), "sets the rails to 36 V"),
        ((f'{RULE}number = "many"',), "has the number 'many'"),
        ((POWER.replace("20 mA", "5 A"),), "twice what the target needs"),
        ((POWER, f'{RULE}number = "1 V"'.replace("divider stiffness", "offset before load")), "an offset of 1 V"),
        ((f'{RULE}number = "0"',), "has the number '0'"),
        ((f'{RULE}number = "-1 %"',), "has the number '-1 %'"),
        ((f'{RULE}number = "nan"',), "has the number 'nan'"),
        (('name = "c"\nkind = "clip"\ntitle = "t"\npoints = ["predriver.resistor"]',), "clips the probes to 0 points"),
        (
            ('name = "c"\nkind = "clip"\ntitle = "t"\npoints = ["emitter.upper.N", "output"]',),
            "clips the probes to 2 points",
        ),
        (
            (POWER, 'name = "l"\nkind = "limit check"\ntitle = "t"\nrails = "2 V"\nlimit = "20 mA"'),
            "tries the limit while the unit has power",
        ),
    ],
)
def test_a_procedure_that_does_not_fit_the_design(steps: tuple[str, ...], words: str) -> None:
    with pytest.raises(FileError, match=r"mine\.toml, section s, step") as caught:
        plan_of(*steps)
    assert words in str(caught.value)


def without_trimmer() -> Design:
    text = BREADBOARD.read_text(encoding="utf-8")
    start, end = text.index("[spreader.trimmer]"), text.index("[output]")
    return changed(BREADBOARD, (text[start:end], ""))


def test_without_a_trimmer_its_steps_fall_away() -> None:
    least = 'name = "l"\nkind = "tell"\ntitle = "t"\ndo = "d"\nact = "trimmer to least"'
    end = f'{MEASURE}points = ["ohm.spreader.ARM"]\nlimits = "the model"'
    rest = 'name = "w"\nkind = "wait"\ntitle = "t"\nseconds = "1 s"\nneeds = "a trimmer"'
    kept = 'name = "k"\nkind = "wait"\ntitle = "t"\nseconds = "1 s"'
    plan = plan_of(least, end, TRIM.replace('"m"', '"q"'), rest, kept, design=without_trimmer())
    assert [item.id for item in own(plan) if item.kind != "connect"] == ["s.k"]


def test_a_design_without_a_trimmer_is_walked_and_its_target_only_checked() -> None:
    plan = make_plan(load_procedure(SHIPPED), without_trimmer())
    words = " ".join(f"{item.title} {item.do} {item.caution} {item.why}" for item in plan.items if item.kind != "rule")
    assert not any(item.kind == "trim" or item.trimmer_end or item.act == "trimmer to least" for item in plan.items)
    assert "rimmer" not in words.replace("No trimmer: the parts set the bias", "")
    assert "screw" not in words.replace("screwdriver", "")
    target = [
        item for item in plan.items if item.limits is not None and item.limits.source == "the target of the design"
    ]
    assert [item.kind for item in target] == ["wait", "measure"]
    first = next(item for item in plan.items if item.kind == "supply")
    design = without_trimmer()
    assert first.limit_a == pytest.approx(supply_limit_a(design, 10.0, -10.0, share=1.0))
    assert first.limit_a > supply_limit_a(breadboard(), 10.0, -10.0, share=0.0)


# -- supply ---------------------------------------------------------------------------------------------------------


def supplies(plan: Plan) -> list[Item]:
    return [item for item in plan.items if item.kind == "supply"]


def test_a_step_below_the_lowest_rails_is_left_out_on_the_way_up() -> None:
    steps = [POWER.replace('"on"', f'"u{share}"').replace('"full"', f'"{share} %"') for share in (10, 15, 90)]
    lowest = POWER.replace('"full"', '"lowest"')
    found = supplies(plan_of(lowest, *steps))
    assert [item.positive_v for item in found] == [2.5, 9.0]


def own(plan: Plan) -> list[Item]:
    """The items of the section that a test wrote itself."""
    return [item for item in plan.items if item.section == "s"]


def test_rails_and_limit_can_be_lowered_without_a_hold_point() -> None:
    down = POWER.replace('"on"', '"down"').replace('"full"', '"5 V"').replace("20 mA", "15 mA")
    plan = plan_of(POWER, down)
    assert [(item.positive_v, item.limit_a, item.raises) for item in supplies(plan)] == [
        (10.0, 0.02, True),
        (5.0, 0.015, False),
    ]
    assert [item.kind for item in own(plan)].count("hold") == 1


def test_only_the_limit_rising_has_its_hold_point() -> None:
    plan = plan_of(POWER, POWER.replace('"on"', '"more"').replace("20 mA", "50 mA"))
    assert [item.kind for item in own(plan)[0:4]] == ["hold", "supply", "hold", "supply"]
    assert "50.00 mA" in own(plan)[2].do


def test_the_same_again_is_no_item() -> None:
    assert len(supplies(plan_of(POWER, POWER.replace('"on"', '"same"')))) == 1


def test_a_written_hold_point_serves_only_the_step_behind_it() -> None:
    hold = 'name = "h"\nkind = "hold"\ntitle = "t"\ndo = "d"'
    plan = plan_of(hold, 'name = "w"\nkind = "wait"\ntitle = "t"\nseconds = "1 s"', POWER)
    assert [item.kind for item in own(plan)[0:4]] == ["hold", "wait", "hold", "supply"]
    plan = plan_of(hold, POWER)
    assert [item.kind for item in own(plan)[0:2]] == ["hold", "supply"]


def test_a_clip_takes_the_power_off_and_gives_it_back_after_a_yes() -> None:
    plan = small().plan
    start = next(number for number, item in enumerate(plan.items) if item.id == "bias.clip.off")
    kinds = [item.kind for item in plan.items[start : start + 7]]
    assert kinds == ["off", "discharge", "discharge", "discharge", "tell", "hold", "supply"]
    low = plan.items[start + 1 : start + 4]
    highs = [item.limits.high for item in low if item.limits is not None]
    assert highs == [RAIL_LOW_V, RAIL_LOW_V, 2 * RAIL_LOW_V]
    assert not any(item.may_go_on for item in low)
    assert plan.items[start + 6].positive_v == 10.0
    assert plan.items[start + 6].limit_a == pytest.approx(0.02)


def test_the_limit_check_is_off_again_before_the_unit_comes() -> None:
    plan = shipped("tern-40")
    start = next(number for number, item in enumerate(plan.items) if item.kind == "limit check")
    assert [item.kind for item in plan.items[start - 1 : start + 3]] == ["hold", "limit check", "off", "tell"]
    check = plan.items[start]
    assert check.limits is not None
    assert check.limits.low == pytest.approx(0.9 * check.limit_a)
    assert check.limits.high == pytest.approx(1.1 * check.limit_a)
    assert check.limit_a == item_of_plan(plan, "low-rails.power").limit_a


def item_of_plan(plan: Plan, name: str) -> Item:
    return next(item for item in plan.items if item.id == name)


def test_charging_the_capacitors_takes_a_part_of_the_limit_only() -> None:
    """I = C dV/dt: the ramp's charging current leaves most of the limit to the stage."""
    for item in supplies(shipped("tern-40")):
        assert item.ramp_s > 0
        charging_a = 100e-6 * item.positive_v / item.ramp_s
        assert charging_a <= 0.31 * item.limit_a


def test_supply_limit_is_one_and_a_half_times_the_draw() -> None:
    design = tern()
    least = 8e-3 * 1.05 + 2 * 0.7 / 220 + 6e-3
    target = least + 22e-3 / 0.22
    for share, drawn_a in ((0.0, least), (1.0, target)):
        limit_a = supply_limit_a(design, 35.0, -35.0, share=share)
        exact = 1.5 * drawn_a + 0.01
        assert exact <= limit_a < exact + 0.005 + 1e-9
        assert math.isclose(limit_a / 0.005, round(limit_a / 0.005))


def test_discharge_is_an_rc_decay() -> None:
    """v = V0 exp(-t/RC): the textbook law, put back in."""
    seconds = discharge_s(tern(), 35.0)
    assert seconds is not None
    assert 35.0 * math.exp(-seconds / (10e3 * 100e-6)) == pytest.approx(RAIL_LOW_V)
    assert discharge_s(tern(), 0.5) == 0.0
    assert discharge_s(breadboard(), 10.0) is None
    assert discharge_s(changed(BREADBOARD, ('local_capacitors = "100 uF"\n', "")), 10.0) == 0.0


def test_equal_conditions_have_equal_keys() -> None:
    one = Condition(positive_v=8.0, negative_v=-8.0, limit_a=0.045, trimmer="least")
    assert condition_key(one) == condition_key(replace(one))
    others: list[Condition | Unpowered | Joined] = [
        replace(one, positive_v=9.0),
        replace(one, negative_v=-9.0),
        replace(one, limit_a=0.05),
        replace(one, trimmer="target"),
        replace(one, trimmer="target", target_share=0.25),
        replace(one, when="warm"),
        Joined(conditions=(one, replace(one, when="warm")), words="cold to warm"),
        Unpowered(point="ohm.rails", trimmer="least"),
        Unpowered(point="ohm.rails", trimmer="unknown"),
    ]
    keys = {condition_key(other) for other in (one, *others)}
    assert len(keys) == len(others) + 1


def test_words_of_the_design_are_in_the_steps() -> None:
    plan = shipped("tern-40")
    least = item_of_plan(plan, "cold.trimmer-least").do
    assert "clockwise, 12 turns" in least
    assert "anticlockwise" not in least
    assert "anticlockwise" in item_of_plan(plan, "bias.target.emitter.upper.1").do
    assert "45.00 mA" in item_of_plan(plan, "low-rails.ready").do
    assert "22.00 mV" in item_of_plan(plan, "bias.target.emitter.upper.1").do


def test_a_single_supply_design_has_one_rail_in_words() -> None:
    assert rails_text(24.0, 0.0) == "24.00 V"
    assert rails_text(35.0, -35.0) == "±35.00 V"
    assert rails_text(35.0, -30.0) == "35.00 V and -30.00 V"


def test_the_shipped_files_are_the_ones_tested() -> None:
    assert SHIPPED.is_file()
    assert TERN.is_file()
    assert "made-safe" in SMALL
    assert item_of(small(), "power.on").positive_v == 2.5


LIVE_END = """
[[section.step]]
name = "again"
kind = "supply"
title = "Up again"
rails = "full"
limit = "for least bias"
do = "Up."
"""


def test_no_power_is_given_in_the_section_that_every_stop_leads_to() -> None:
    with pytest.raises(FileError, match="gives power in the section that every stop leads to"):
        make_plan(parse_procedure(SHIPPED.read_text(encoding="utf-8") + LIVE_END, "p.toml"), tern())


@pytest.mark.parametrize(
    "limits", ['{ low = "-1 kV", high = "1 kV" }', '{ low = "0 V", high = "1.1 V" }', '{ high = "1 V" }']
)
def test_rails_that_are_not_low_do_not_end_a_walk(limits: str) -> None:
    text = SHIPPED.read_text(encoding="utf-8")
    low = text[: text.index('kind = "discharge"')].rindex("[[section.step]]")
    end = text.index("[[section.step]]", low + 1)
    step = f"""[[section.step]]
name = "rails"
kind = "measure"
title = "Rails"
points = ["rail+", "rail-"]
limits = {limits}
do = "Read."

"""
    with pytest.raises(FileError, match="nobody sees the rails low at the end"):
        make_plan(parse_procedure(text[:low] + step + text[end:], "p.toml"), tern())
    good = step.replace(limits, '{ low = "-1 V", high = "1 V" }')
    make_plan(parse_procedure(text[:low] + good + text[end:], "p.toml"), tern())
