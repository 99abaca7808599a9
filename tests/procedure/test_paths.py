"""What has to hold on every path: checks before power, gentle first power, loads, whatever is left out."""

from __future__ import annotations

import pytest

from benchkit.errors import FileError
from benchkit.procedure.file import load_procedure, parse_procedure
from benchkit.procedure.items import Plan
from benchkit.procedure.plan import make_plan
from benchkit.shipped import find_procedure
from tests.stage.designs import breadboard

FOUND = "unknown_trimmer = true"


def step(name: str, kind: str, *lines: str) -> str:
    return "\n".join((f'[[section.step]]\nname = "{name}"\nkind = "{kind}"\ntitle = "T"', *lines, ""))


def section(name: str, *steps: str, more: str = "") -> str:
    return f'[[section]]\nname = "{name}"\ntitle = "T"\n{more}\n{"".join(steps)}\n'


def measure(name: str, point: str, *lines: str) -> str:
    return step(name, "measure", f'points = ["{point}"]', *(lines or ('limits = "the model"',)))


def supply(name: str, rails: str, limit: str) -> str:
    return step(name, "supply", f'rails = "{rails}"', f'limit = "{limit}"')


def tell(name: str, act: str) -> str:
    return step(name, "tell", 'do = "D"', f'act = "{act}"')


def clip(name: str, act: str) -> str:
    return step(name, "clip", 'points = ["emitter.upper.1"]', f'act = "{act}"')


def limit_check(limit: str = "for the target") -> str:
    return step("limit", "limit check", 'rails = "2 V"', f'limit = "{limit}"')


LEAST = tell("least", "trimmer to least") + measure("end", "ohm.spreader.ARM")
RAILS = measure("rails", "ohm.rails")
OUTPUT = measure("output", "ohm.output")
ON = supply("on", "lowest", "for the target")
FULL = supply("full", "full", "for the target")
OFF = step("off", "off")
OFFSET = measure("zero", "output") + step("offset", "rule", 'rule = "offset before load"', 'number = "50 mV"')
TRIM = step("trim", "trim", 'points = ["emitter.upper.1"]', 'share = "100 %"')
CHECK = measure("check", "emitter.upper.1", 'limits = "the target"', 'trim_again = "trim"')
LOAD, UNLOAD = clip("load", "connect the dummy load"), clip("unload", "take the dummy load off")
DRIVE, STOP = tell("drive", "drive the stage"), tell("stop", "stop driving")
ROOM, BACK = supply("room", "full", "for the drive"), supply("back", "full", "for the target")
PARTS = section("parts", step("parts", "parts replaced", 'do = "Which?"'))
SAFE = section("made-safe", OFF, step("low", "discharge"))
OPTIONAL = 'optional = "Is it wanted?"'
REPLACED = 'only_if = "parts replaced"'
NONE_REPLACED = 'only_if = "no parts replaced"'


def checks(*steps: str) -> str:
    return section("cold", *(steps or (LEAST, RAILS, OUTPUT, limit_check())), more="resume = true")


AS_FOUND = checks(RAILS, OUTPUT, limit_check())


def plan(*sections: str, head: str = "") -> Plan:
    text = f'[procedure]\nformat = 1\nname = "N"\npurpose = "P"\n{head}\n{"".join(sections)}{SAFE}'
    return make_plan(parse_procedure(text, "own.toml"), breadboard())


POWER = section("power", ON, FULL, OFFSET)
OPTIONAL_POWER = section("maybe", ON, OFF, more=OPTIONAL)
UP = section("up", supply("slow", "lowest", "for the target"), FULL)
CAREFUL = section("careful", RAILS, OUTPUT, LEAST, ON, OFF, more=REPLACED)


@pytest.mark.parametrize(
    ("sections", "head"),
    [
        ((checks(), POWER), ""),
        ((AS_FOUND, POWER), FOUND),
        ((AS_FOUND, OPTIONAL_POWER, UP), FOUND),
        ((AS_FOUND, PARTS, section("found", ON, OFF, more=NONE_REPLACED), CAREFUL, UP), FOUND),
        ((checks(), POWER, section("load", LOAD, ROOM, DRIVE, STOP, BACK, UNLOAD, TRIM, CHECK, more=OPTIONAL)), ""),
        ((checks(), section("tried", LEAST, more=OPTIONAL), POWER), ""),
        ((checks(LEAST, RAILS, limit_check("50 mA")), section("power", supply("on", "full", "51 mA"))), ""),
    ],
)
def test_what_holds_on_every_path_is_planned(sections: tuple[str, ...], head: str) -> None:
    assert any(item.kind == "supply" for item in plan(*sections, head=head).items)


@pytest.mark.parametrize(
    ("sections", "head", "said"),
    [
        # a check that may be left out proves nothing
        ((checks(RAILS, OUTPUT, limit_check()), section("end", LEAST, more=OPTIONAL), POWER), "", "trimmer's end"),
        ((checks(LEAST, OUTPUT, limit_check()), section("r", RAILS, more=OPTIONAL), POWER), "", "ohm.rails"),
        ((checks(LEAST, RAILS), section("l", limit_check(), more=OPTIONAL), POWER), "", "when l is left out"),
        ((checks(RAILS, limit_check()), section("o", OUTPUT, more=OPTIONAL), POWER), FOUND, "ohm.output"),
        # a first power that may be left out is not the only first power
        ((AS_FOUND, OPTIONAL_POWER, section("up", FULL)), FOUND, "when maybe is left out"),
        ((AS_FOUND, section("up", supply("on", "50 %", "for the target"))), FOUND, 'rails = "lowest"'),
        ((AS_FOUND, section("up", supply("on", "lowest", "79 mA"))), FOUND, "or less"),
        ((AS_FOUND, section("up", ON, supply("more", "full", "79 mA"))), FOUND, "while the trimmer is anywhere"),
        # parts that were replaced make the next power a first one
        ((AS_FOUND, PARTS, POWER), FOUND, "after parts have been replaced"),
        ((checks(), PARTS, POWER), "", "after parts have been replaced"),
        ((checks(), PARTS, section("new", RAILS, LEAST, more=REPLACED), section("up", FULL)), "", "were replaced"),
        ((AS_FOUND, PARTS, section("new", RAILS, OUTPUT, ON, OFF, more=REPLACED), UP), FOUND, "trimmer's end"),
        # "semiconductors" leaves other parts out
        (
            (AS_FOUND, PARTS, CAREFUL.replace(REPLACED, 'only_if = "semiconductors replaced"'), UP),
            FOUND,
            "when careful is left out after parts",
        ),
        # the limit that was tried
        ((checks(LEAST, RAILS, limit_check("1 mA")), POWER), "", "1.000 mA was tried into the short"),
        ((checks(LEAST, RAILS, limit_check("50 mA")), section("p", supply("on", "full", "52 mA"))), "", "begins with"),
        ((checks(LEAST, RAILS, limit_check("for the drive")), POWER), "", "without a dummy load"),
        # limits for a driven stage
        ((checks(), section("p", supply("on", "full", "for the power soak"))), "", "without a dummy load"),
        ((checks(), section("p", ON, ROOM, TRIM)), "", "without a dummy load"),
        ((checks(), POWER, section("d", LOAD, ROOM, UNLOAD, BACK)), "", "without a dummy load"),
        # the load
        ((checks(), section("p", tell("load", "connect the dummy load"), ON)), "", "before the offset has been proven"),
        ((checks(), section("p", ON, OFFSET, OFF, more=OPTIONAL), section("q", LOAD, UNLOAD)), "", "p is left out"),
        ((checks(), section("p", ON, OFFSET, LOAD, FULL, UNLOAD)), "", "the offset was proven at less"),
        ((checks(), section("p", ON, OFFSET, tell("load", "connect the dummy load"))), "", "while the unit has power"),
        ((checks(), POWER, section("d", LOAD)), "", "with the dummy load on"),
        ((checks(), POWER, section("d", LOAD, more=OPTIONAL), section("e", UNLOAD)), "", "with the dummy load on"),
        ((checks(), POWER, section("d", LOAD, UNLOAD, DRIVE)), "", "drives a stage without a dummy load"),
        ((checks(), POWER, section("d", LOAD, DRIVE, UNLOAD)), "", "takes the load off a driven stage"),
        ((checks(), POWER, section("d", LOAD, DRIVE, ROOM, STOP, BACK, UNLOAD)), "", "while the stage is driven"),
        ((checks(), POWER, section("d", LOAD, TRIM, UNLOAD)), "", "trims while a dummy load is on"),
        ((checks(), POWER, section("d", TRIM, LOAD, CHECK, UNLOAD)), "", "leads back to d.trim"),
    ],
)
def test_what_does_not_hold_on_one_path_is_refused(sections: tuple[str, ...], head: str, said: str) -> None:
    with pytest.raises(FileError) as caught:
        plan(*sections, head=head)
    assert said in str(caught.value)


def test_a_walk_that_was_cut_off_after_a_repair_is_careful_too() -> None:
    """Parts that were replaced before the walk was cut off are remembered; where it goes on, they count."""
    found = section("found", ON, OFF)
    with pytest.raises(FileError, match="in a walk that was cut off and goes on after parts have been replaced"):
        plan(AS_FOUND, found, PARTS, CAREFUL, UP, head=FOUND)


def test_a_limit_for_a_driven_stage_is_known_as_one() -> None:
    found = make_plan(load_procedure(find_procedure("re-bias")), breadboard())
    driven = {item.id for item in found.items if item.drive_limit}
    assert {"driven.room", "power-soak.room"} <= driven
    assert not {"driven.room-back", "driven.load-off.again.power", "bias.more-current", "limit.limit-check"} & driven
