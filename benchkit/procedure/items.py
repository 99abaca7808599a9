"""What a plan is made of: items, and the conditions that their readings are taken under."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal

from benchkit import quantities
from benchkit.judge.limits import Limits
from benchkit.stage.conditions import Condition, Unpowered
from benchkit.stage.observations import Conditions
from benchkit.stage.points import Point
from benchkit.stage.stored import Stored


@dataclass(frozen=True, kw_only=True)
class Joined:
    """Several conditions under any of which a reading may have been taken.

    A stage that has been powered for a while is anywhere from cold to warm; one that was trimmed is anywhere inside the
    target's tolerance.  `words` stand at the end of the condition's name.  The first of three conditions lies between
    the other two.
    """

    conditions: tuple[Condition, ...]
    words: str

    @property
    def ends(self) -> tuple[Condition, ...]:
        """The ends between which a reading was taken."""
        return self.conditions[-2:]


AnyCondition = Condition | Unpowered | Joined

ItemKind = Literal[
    "connect",
    "warm state",
    "tell",
    "confirm",
    "text",
    "hold",
    "measure",
    "rule",
    "supply",
    "limit check",
    "trim",
    "wait",
    "off",
    "discharge",
    "lamp",
    "parts",
    "choose",
]

JUDGED_KINDS = frozenset(
    {"warm state", "confirm", "measure", "rule", "supply", "limit check", "trim", "discharge", "lamp"}
)
"""Kinds of item that end in a result; a walk passes only when each of them has one."""

NEVER_PASSED_OVER = frozenset({"ohm.rails", "ohm.rail+", "ohm.rail-", "offset before load"})
"""Points and rules whose result nobody overrides, whatever the file says; nor a limit check or the trimmer's end.

Where the trimmer may stand as it was found, the output's resistance is one of them too.
"""

MOST_OFFSET_V = 0.05
"""The most d.c. (V) at the output before a load is connected that a procedure may allow; common practice."""

RAIL_LOW_V = 1.0
"""A rail below this (V) counts as low; common practice."""

RAIL_POINTS = ("rail+", "rail-", "rails")
"""Points that tell whether a unit without power holds a charge."""

TRIMMED = "emitter.upper.1"
"""The reading that the model takes a trimmed stage's target from."""

TELLS_TARGET = frozenset({TRIMMED, "emitter.lower.1", "emitter.pair.1"})
"""Points whose reading says where a trim has brought the target; after a trim by any other the trimmer is anywhere."""

CLEARS_PROTECTION = "clear the protection"
"""The act that a person does at a supply whose own protection has tripped."""

DRIVE_SHARES: Mapping[str, float] = {
    "drive the stage": 1.0 / 30.0,
    "drive at a third of full power": 1.0 / 3.0,
    "stop driving": 0.0,
}
"""Acts that drive the stage, each with its share of full power.

At a thirtieth the mean current is well above the idle current of usual designs (our own figure); a third is common
practice for a power soak.
"""


@dataclass(frozen=True, kw_only=True)
class Item:
    """One reading or one act of a plan.

    Parameters
    ----------
    id : str
        ``section.step`` with the point or part of the act behind it; unique in the plan.
    section, section_title : str
    kind : ItemKind
    title, do, why, caution, expected : str
        The words, with everything filled in.
    point : Point or None
        What is measured or trimmed.
    condition : Condition, Unpowered, Joined or None
        What the reading is taken under; None where limits are stated and nothing is predicted.
    limits : Limits or None
        Stated limits; None where they come from the model.
    held_under : Condition, Unpowered, Joined or None
        What the reading is taken under where its limits are stated: the trimmed drop, which tells how the unit was
        trimmed.
    told_under : Condition, Unpowered, Joined or None
        What the model takes the reading to be made under where that is laxer than `condition`: a stage whose reading
        has come to rest is still on its way to warm, with its trimmer wherever that was turned to.
    warm : tuple of Condition
        For ``warm state``: under these the design has to come to rest.
    rule : str
        Name of the rule, with `number`, as the ratio or volts that the rule wants.
    may_go_on : bool
        A result that is no pass can be overridden with a reason.
    positive_v, negative_v, limit_a, ramp_s : float
        For ``supply`` and ``limit check``.
    seconds : float
        For ``wait``: how long, or how long at most.
    until_settled : bool
        For ``wait``: it ends once the reading of `point` has come to rest, after `least_s` (s) at the earliest, with a
        drift below `drift_limit` (in the point's unit, per second).
    settle_s : float
        How long the reading has to come to rest after the probes are on, or the stage after its rails have moved.
    falls : Stored or None
        For ``discharge``: what the rails hold, and how fast they should fall.
    samples : int
    acceptance : "guarded", "simple" or "guarded rejection"
        How a reading is judged (JCGM 106): with a guard band inside the limits, without one, or with one outside.
    allow : float
        How much the model's limits are widened on either side, in the point's unit.
    act : str
        What a told item does to the bench: "short the leads", "connect the unit", "trimmer to least", or "".
        "clear the protection" is done only where the supply says that one has tripped.
    trimmer_end : bool
        This reading checks that the trimmer is at its least-bias end.
    powered : bool
        The supply is on while this item runs.
    raises : bool
        It raises a voltage or the limit.
    drive_limit : bool
        For ``supply`` and ``limit check``: the limit is what a driven stage takes.
    resume : bool
        A walk that was cut off while or after the unit had power goes on here.
    host : str
        For an extra reading: the plan's item that it is to explain.
    share : float
        For ``trim``: share of the design's target.
    slope_under : Condition or None
        For ``trim``: where it happens, for the model's slope; the trimmer is at the target there.
    back : str
        For ``measure``: the trim to which one may go back from here; "" for none.
    retake : tuple of str
        For ``rule``: those of the readings just before it that it judges, and that may be read again.
    driven : bool
        The reading is taken with the stage driven: the model knows nothing of it.
    only_if : str
        The section is done only if: "parts replaced", "no parts replaced", "semiconductors replaced", "no
        semiconductors replaced", "from least bias"; "" for always.
    limited_to : str
        The item of the kind ``off`` to which a rail in its limit leads; "" where that ends the walk.
    optional : bool
        The section is done only when the operator has chosen it.
    marked : str
        The section's readings are those that the unit was "found" with, or "left" with; "" for neither.
    """

    id: str
    section: str
    section_title: str
    kind: ItemKind
    title: str
    do: str
    why: str = ""
    caution: str = ""
    expected: str = ""
    point: Point | None = None
    condition: AnyCondition | None = None
    limits: Limits | None = None
    held_under: AnyCondition | None = None
    told_under: AnyCondition | None = None
    warm: tuple[Condition, ...] = ()
    rule: str = ""
    number: float | None = None
    may_go_on: bool = True
    positive_v: float = 0.0
    negative_v: float = 0.0
    limit_a: float = 0.0
    ramp_s: float = 0.0
    seconds: float = 0.0
    until_settled: bool = False
    least_s: float = 0.0
    drift_limit: float = 0.0
    settle_s: float = 0.0
    falls: Stored | None = None
    samples: int = 1
    acceptance: Literal["guarded", "simple", "guarded rejection"] = "guarded"
    allow: float = 0.0
    act: str = ""
    trimmer_end: bool = False
    powered: bool = False
    raises: bool = False
    drive_limit: bool = False
    resume: bool = False
    host: str = ""
    share: float = 1.0
    slope_under: Condition | None = None
    back: str = ""
    retake: tuple[str, ...] = ()
    driven: bool = False
    only_if: str = ""
    limited_to: str = ""
    optional: bool = False
    marked: Literal["", "found", "left"] = ""


@dataclass(frozen=True, kw_only=True)
class Plan:
    """The items of one walk, in order, where its way out begins, and every test point that the design has."""

    items: tuple[Item, ...]
    made_safe: int
    resume: int
    points: tuple[Point, ...] = field(default=(), repr=False)

    def __len__(self) -> int:
        return len(self.items)


def conditions_of(condition: AnyCondition) -> Conditions:
    """The conditions of a reading, as the model takes them: one, or the ends between which it was taken."""
    return condition.ends if isinstance(condition, Joined) else (condition,)


def condition_key(condition: AnyCondition) -> str:
    """A readable name of a condition; equal conditions have equal names."""
    if isinstance(condition, Joined):
        first = condition.conditions[0]
        return condition_key(first).removesuffix(first.when) + condition.words
    if isinstance(condition, Unpowered):
        return f"no power, trimmer {condition.trimmer}"
    share = f" at {condition.target_share:.0%}" if condition.trimmer == "target" else ""
    limit = "" if condition.limit_a is None else f", limit {quantities.show(condition.limit_a, 'A')}"
    rails = f"{condition.positive_v:+.4g} V {condition.negative_v:+.4g} V"
    return f"{rails}{limit}, trimmer {condition.trimmer}{share}, {condition.when}"
