"""What a plan makes of trims, waits, sections that may be left out, and of a trimmer that stands as it was found."""

from __future__ import annotations

import pytest

from benchkit.errors import FileError
from benchkit.procedure.file import load_procedure, parse_procedure
from benchkit.procedure.file_words import time_s
from benchkit.procedure.items import Item, Joined, Plan
from benchkit.procedure.plan import make_plan
from benchkit.shipped import find_procedure
from benchkit.stage.design import Design
from tests.procedure.driver import SMALL
from tests.procedure.test_leaving_out import TEXT
from tests.stage.catalogue import few
from tests.stage.designs import breadboard, tern


def plan(text: str, design: Design | None = None) -> Plan:
    return make_plan(parse_procedure(text, "own.toml"), design or breadboard())


def changed(old: str, new: str, text: str = TEXT) -> str:
    assert text.count(old) >= 1
    return text.replace(old, new)


def one(found: Plan, item: str) -> Item:
    return next(item_ for item_ in found.items if item_.id == item)


@pytest.mark.parametrize(
    ("point", "times", "held"),
    [("emitter.lower.1", 1.0, True), ("emitter.pair.1", 2.0, True), ("rail+.current", None, False)],
)
def test_the_target_can_be_read_elsewhere(point: str, times: float | None, held: bool) -> None:
    text = changed('points = ["emitter.upper.1"]', f'points = ["{point}"]')
    text = text.replace(
        f'kind = "clip"\ntitle = "Clip"\npoints = ["{point}"]',
        'kind = "clip"\ntitle = "Clip"\npoints = ["emitter.upper.1"]',
    )
    found = plan(text)
    trim, soak, target = (one(found, f"bias.{name}") for name in (f"trim.{point}", "soak-long", f"target.{point}"))
    assert soak.point is not None
    assert soak.point.name == point
    assert trim.limits is not None
    assert soak.limits == target.limits
    if times is not None:
        assert trim.limits.nominal == pytest.approx(times * 47e-3)
    assert (target.held_under is not None) == held
    assert target.back == trim.id


def test_after_a_trim_that_the_model_can_not_place_the_trimmer_is_anywhere() -> None:
    more = (
        '[[section.step]]\nname = "again"\nkind = "measure"\ntitle = "A"\npoints = ["spread"]\nlimits = "the model"\n'
    )
    text = changed('[[section]]\nname = "more"', more + '\n[[section]]\nname = "more"')
    for point, trimmer in (("emitter.upper.1", "target"), ("rail+.current", "unknown")):
        own = text.replace(
            'kind = "trim"\ntitle = "Trim"\npoints = ["emitter.upper.1"]',
            f'kind = "trim"\ntitle = "Trim"\npoints = ["{point}"]',
        )
        condition = one(plan(own), "bias.again.spread").condition
        assert isinstance(condition, Joined)
        assert {one_.trimmer for one_ in condition.conditions} == {trimmer}


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ('points = ["emitter.upper.1"]\nshare', 'points = ["output"]\nshare', "judges output by the target"),
        ('points = ["emitter.upper.1"]\nshare', 'points = ["rail+.drop"]\nshare', "nobody has named"),
        ('trim_again = "trim"', 'trim_again = "soak"', "leads back to 'soak'"),
        ('drift = "3 %/min"', 'drift = "3 %"', "an amount a minute"),
        ('drift = "3 %/min"', 'drift = "3 mA/min"', "drift by '3 mA/min'"),
        ('drift = "3 %/min"', 'drift = "0 %/min"', "more than 0 %"),
        ('drift = "3 %/min"', 'drift = "10 mV/min"', "at most 20% of the target"),
        ('at_least = "20 s"', 'at_least = "400 s"', "at most 300 s"),
        ('until = "settled"\n', "", "until"),
        ('until = "settled"', 'until = "settled"\npoints = ["emitter.upper.N", "emitter.lower.N"]', "one test point"),
        ('limits = { low = "-10 mA" }', 'limits = "the model"', "driven stage"),
        ('optional = "Is', 'only_if = "parts replaced"\noptional = "Is', "one of them"),
        ('optional = "Is', 'resume = true\noptional = "Is', "can't be left out"),
        ('kind = "confirm"\ntitle = "Look"', 'kind = "off"\ntitle = "Look"', "leaves the supply otherwise"),
        ('kind = "confirm"\ntitle = "Look"', 'kind = "parts replaced"\ntitle = "Look"', "while the supply is on"),
        ("{load}", "{lode}", "words in braces"),
    ],
)
def test_what_makes_no_sense_is_refused_in_words(old: str, new: str, said: str) -> None:
    with pytest.raises(FileError) as caught:
        plan(changed(old, new))
    assert said in str(caught.value)


def test_a_way_back_needs_the_supply_as_it_was() -> None:
    lower = '[[section.step]]\nname = "down"\nkind = "supply"\ntitle = "D"\nrails = "full"\nlimit = "30 mA"\n'
    text = changed('[[section.step]]\nname = "target"', lower + '[[section.step]]\nname = "target"')
    with pytest.raises(FileError, match="where the supply stands otherwise"):
        plan(text)


def test_a_section_that_turns_the_trimmer_and_may_be_left_out_leaves_it_anywhere() -> None:
    least = (
        '[[section]]\nname = "maybe"\ntitle = "M"\noptional = "M?"\n[[section.step]]\nname = "least"\nkind = "tell"\n'
    )
    least += 'title = "L"\ndo = "L"\nact = "trimmer to least"\n'
    least += '[[section.step]]\nname = "end"\nkind = "measure"\ntitle = "E"\npoints = ["ohm.spreader.ARM"]\n'
    least += 'limits = "the model"\n\n'
    text = changed('[[section]]\nname = "limit"', least + '[[section]]\nname = "limit"', SMALL)
    more = plan(text)
    condition = one(more, "power.output-first.output").condition
    assert isinstance(condition, Joined)
    assert condition.conditions[0].trimmer == "least", "it was there before, too"
    own = text.index('[[section.step]]\nname = "least"\n')
    without = text[:own] + text[text.index('[[section.step]]\nname = "end"') :]
    with pytest.raises(FileError, match="proves the trimmer's end"):
        plan(without)


# -- powered as it was found ----------------------------------------------------------------------------------------

FOUND = find_procedure("re-bias").read_text(encoding="utf-8")


def test_a_unit_may_be_powered_as_it_was_found_from_the_lowest_rails() -> None:
    found = plan(FOUND)
    first = next(item for item in found.items if item.kind == "supply")
    assert first.section == "found"
    after = one(found, "found.output-low.output").condition
    assert isinstance(after, Joined)
    assert {one_.trimmer for one_ in after.conditions} == {"unknown"}
    check = one(found, "look.warm-state")
    assert {condition.trimmer for condition in check.warm} == {"least", "target"}, "the position found is no design's"


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ("unknown_trimmer = true\n", "", "proves the trimmer's end"),
        ('rails = "lowest"\nlimit = "for the target"', 'rails = "50 %"\nlimit = "for the target"', 'rails = "lowest"'),
        ('rails = "lowest"\nlimit = "for the target"', 'rails = "lowest"\nlimit = "60 mA"', 'limit = "for the target"'),
        ('points = ["ohm.output"]', 'points = ["ohm.rails"]', "ohm.output"),
        ('points = ["ohm.spreader.ARM"]', 'points = ["ohm.rails"]', "proves the trimmer's end"),
    ],
)
def test_nothing_less_is_taken(old: str, new: str, said: str) -> None:
    text = changed(old, new, FOUND)
    with pytest.raises(FileError) as caught:
        plan(text)
    assert said in str(caught.value)


def test_nobody_passes_over_the_output_where_the_trimmer_is_anywhere() -> None:
    text = FOUND.replace(
        'points = ["ohm.output"]\nlimits = "the model"\noverride = false',
        'points = ["ohm.output"]\nlimits = "the model"',
    )
    assert text != FOUND
    assert not one(plan(text), "cold.output-to-zero.ohm.output").may_go_on
    for weak in ('limits = { low = "1 mohm" }', 'limits = "the model"\nallow = "1 kohm"'):
        own = text.replace('points = ["ohm.output"]\nlimits = "the model"', f'points = ["ohm.output"]\n{weak}')
        with pytest.raises(FileError, match=r"judges ohm\.output by limits of its own"):
            plan(own)


# -- what comes along -----------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["production-trim", "re-bias"])
@pytest.mark.parametrize(
    "design",
    [
        "single resistor resistor lower series 1",
        "feedback resistor resistor none 1",
        "double resistor servo upper tied 1 stopper one supply",
    ],
)
def test_every_walk_has_a_plan_for_every_kind_of_stage(name: str, design: str) -> None:
    found = make_plan(load_procedure(find_procedure(name)), few()[design])
    trims = [item for item in found.items if item.kind == "trim"]
    checks = [
        item for item in found.items if item.limits is not None and item.limits.source == "the target of the design"
    ]
    assert bool(trims) == (" none " not in design)
    assert any(item.kind == "measure" for item in checks), "without a trimmer the target is checked all the same"
    assert {"output.ac"} <= {item.point.name for item in found.items if item.point is not None}
    assert "idle against driven" in {item.rule for item in found.items}
    acts = [item.act for item in found.items if item.act]
    assert acts.index("connect the dummy load") < acts.index("drive the stage")
    assert all(item.may_go_on is False for item in found.items if item.kind == "supply")


def test_the_production_trim_pre_sets_cold_and_confirms_warm() -> None:
    found = make_plan(load_procedure(find_procedure("production-trim")), tern())
    names = [item.id for item in found.items if item.section == "bias"]
    order = ["bias.pre-set.emitter.upper.1", "bias.soak", "bias.warm-trim.emitter.upper.1", "bias.settle"]
    assert names[-5:] == [*order, "bias.target.emitter.upper.1"]
    preset = one(found, order[0])
    assert preset.share == pytest.approx(0.918, abs=0.01)
    assert preset.slope_under is not None
    assert preset.slope_under.when == "cold"
    assert one(found, order[1]).until_settled


@pytest.mark.parametrize(("text", "seconds"), [("5 min", 300.0), ("0.5 min", 30.0), ("90 s", 90.0)])
def test_a_target_time_may_be_in_minutes(text: str, seconds: float) -> None:
    assert time_s(text) == seconds
    own = TEXT.replace("format = 1\n", f'format = 1\ntarget_time = "{text}"\n', 1)
    assert parse_procedure(own, "own").head.target_time_s == seconds


@pytest.mark.parametrize("text", ["soon", "0 min", "-3 s", "3 V", "min"])
def test_a_target_time_that_is_none_is_refused(text: str) -> None:
    with pytest.raises(FileError) as caught:
        parse_procedure(TEXT.replace("format = 1\n", f'format = 1\ntarget_time = "{text}"\n', 1), "own")
    assert "target_time" in str(caught.value)
