"""The words of a walk: which question an item puts, with which answers."""

from __future__ import annotations

from dataclasses import replace
from typing import Final

from benchkit import quantities
from benchkit.events import Judged, NarrowedLimits, PointLimits
from benchkit.judge.limits import Limits
from benchkit.procedure.actions import Choice, Question
from benchkit.procedure.items import RAIL_POINTS, Item
from benchkit.stage.points import Point

DONE = Choice(value="done", label="Done")
YES = Choice(value="yes", label="Yes")
NO = Choice(value="no", label="No")
WIPER_OPENED: Final = "wiper has opened"
"""What the adviser says of such a trim (`benchkit.judge.falls`)."""

BACK_TO_LEAST: Final = (
    "Before it is tried again: trimmer back to its least-bias end. A wiper that closes again throws the bias up."
)

AGAIN = Choice(value="again", label="Again")
GO_ON = Choice(value="go on", label="Note a reason and go on", wants_reason=True)
ON = Choice(value="go on", label="Go on")
LEAVE = Choice(value="go on", label="Leave it, go on with making safe")
STOP = Choice(value="make safe", label="Make safe and stop")
WATCH = Choice(value="done", label="Go on watching")
ENOUGH = Choice(value="enough", label="Take it as it reads now")
TRIM_AGAIN = Choice(value="trim again", label="Trim again")
PASS_OVER = Choice(value="no", label="Pass over it")
DO_IT = Choice(value="yes", label="Do it")
NOTHING_REPLACED = Choice(value="no", label="Nothing was replaced")
SEMICONDUCTORS = Choice(
    value="semiconductors",
    label="Transistors or diodes, named next",
    wants_reason=True,
    wanted="all the parts that were replaced",
)
OTHER_PARTS = Choice(
    value="other parts",
    label="Other parts only, named next",
    wants_reason=True,
    wanted="all the parts that were replaced",
)
TAKE = Choice(value="take", label="Take this reading")
END = Choice(value="end", label="It can't be reached")


BY_HAND_ALWAYS: Final = "Nothing switches this unit off by itself, and nothing here can."


def question_for(item: Item) -> Question:
    """The question of an item that is told, confirmed, typed or held."""
    choices = {
        "tell": (DONE, STOP),
        "confirm": (YES, NO, STOP),
        "text": (DONE, STOP),
        "hold": (YES, STOP),
        "lamp": (YES, NO, STOP),
        "parts": (NOTHING_REPLACED, SEMICONDUCTORS, OTHER_PARTS, STOP),
        "choose": (PASS_OVER, DO_IT, STOP),
    }[item.kind]
    point = item.point
    return Question(
        item=item.id,
        kind="confirm" if item.kind == "lamp" else item.kind,  # type: ignore[arg-type]
        title=item.title,
        do=item.do,
        why=item.why,
        caution=f"{item.caution} {BY_HAND_ALWAYS}".strip() if item.kind == "lamp" else item.caution,
        expected=item.expected,
        point="" if point is None else point.name,
        red="" if point is None else point.red,
        black="" if point is None else point.black,
        choices=choices,
    )


def placing(item: Item, limits: Limits) -> Question:
    """Where the probes go for a reading, and what it should be."""
    assert item.point is not None
    return Question(
        item=item.id,
        kind="probes",
        title=item.title,
        do=item.do,
        why=item.why,
        caution=item.caution,
        expected="; ".join(text for text in (expected_text(limits), item.expected) if text),
        point=item.point.name,
        red=item.point.red,
        black=item.point.black,
        choices=(DONE, STOP),
    )


def falling(item: Item) -> Question:
    """What stands on the screen while a rail is watched down."""
    assert item.point is not None
    assert item.limits is not None
    return Question(
        item=item.id,
        kind="watch",
        title=item.title,
        do="Keep the probes where they are, hands off the circuit: the rail is watched until it is low.",
        caution=item.caution,
        expected="; ".join(text for text in (expected_text(item.limits), item.expected) if text),
        point=item.point.name,
        red=item.point.red,
        black=item.point.black,
        choices=(WATCH, ENOUGH),
    )


def trimming(item: Item) -> Question:
    """The question that stands while the screw is turned."""
    assert item.point is not None
    assert item.limits is not None
    return Question(
        item=item.id,
        kind="trim",
        title=item.title,
        do=item.do,
        why=item.why,
        caution=item.caution,
        expected=expected_text(item.limits),
        point=item.point.name,
        red=item.point.red,
        black=item.point.black,
        choices=(TAKE, END, STOP),
    )


def deciding(
    item: Item,
    result: Judged | None,
    problem: str,
    *,
    way_out: bool,
    offer: Point | None = None,
    trim_again: bool = False,
) -> Question:
    """What to do after a result that is no pass, an odd reading, or no result at all.

    `offer` is a test point that would tell more; it is one answer more, the
    last: the numbers and places of the others stay when it comes.  With `trim_again` the usual answer is to go back
    to the trim.
    """
    odd = result is not None and result.verdict == "pass"
    rare = result is not None and result.rare
    if result is not None:
        said = {"fail": "failed", "undecided": "is undecided", "pass": "is odd for this unit"}[result.verdict]
        said = "lies just outside the limits of good units" if rare else said
        what = f"{item.title} {said}."
        why = result.why
    else:
        what, why = f"{item.title}: there is no result.", problem
    choices = [ON, AGAIN] if odd else [AGAIN, ON] if rare else [AGAIN]
    opened = result is not None and item.kind == "trim" and WIPER_OPENED in result.why
    if opened:
        choices = [STOP, AGAIN]
    if trim_again:
        choices.insert(0, TRIM_AGAIN)
    if not (odd or rare or opened) and (item.may_go_on or way_out):
        choices.append(GO_ON)
    if not way_out and not opened:
        choices.append(STOP)
    if offer is not None:
        choices.append(probing(offer))
    caution = "" if odd or item.may_go_on or way_out else "There is no way past this result but a better one."
    if opened:
        caution = BACK_TO_LEAST
    if odd:
        caution = "Inside the design's limits, so no failure: see what the other readings say."
    if rare:
        caution = "Rare, but no failure: measure again, then see what all readings together say."
    if way_out and item.point is not None and item.point.name in RAIL_POINTS:
        caution = "Hands off until every rail has been seen low. Going on ends the walk here: take the unit as live."
    return Question(
        item=item.id,
        kind="decide",
        title=what,
        do=why,
        why=item.why,
        caution=caution,
        point="" if item.point is None else item.point.name,
        red="" if item.point is None else item.point.red,
        black="" if item.point is None else item.point.black,
        choices=tuple(choices),
    )


def reading_again(points: tuple[Point, ...]) -> Choice:
    """The answer that takes anew what a rule judged."""
    names = " and ".join(point.name for point in points) if len(points) <= 2 else f"its {len(points)} points"
    return Choice(value="read again", label=f"Read {names} again")


INSIDE_WHY: Final = "The value itself lies inside: what leaves it open is the meter's accuracy."
"""Said of a reading inside its limits whose uncertainty reaches over them."""


def open_by_the_meter(question: Question, item: Item) -> Question:
    """Return what to do after a reading that lies inside its limits, and is undecided for its uncertainty alone."""
    return replace(
        question,
        title=f"{item.title} is undecided.",
        caution=(
            "No failure: the same meter will leave it open again. A finer one decides, or its own accuracy in a bench "
            "file; else all readings together do."
        ),
    )


def offering(item: Item, offer: Point | None) -> Question:
    """Whether to take one more reading now that the unit is safe."""
    do = (
        f"The unit has no power now. A reading of {offer.name} would tell most about what is wrong."
        if offer is not None
        else "The unit has no power now. No further reading is asked for at the moment."
    )
    return Question(
        item=item.id,
        kind="decide",
        title="One more reading before the end?",
        do=do,
        why="The suspects are those of the readings so far; an extra reading is kept and judged like any other.",
        choices=(LEAVE,) if offer is None else (probing(offer), LEAVE),
    )


def probing(point: Point) -> Choice:
    """The answer that takes an extra reading."""
    return Choice(value="probe", label=f"Read {point.name} next")


def by_hand_off(item: Item, how: str) -> Question:
    """Ask a person to do what could not be confirmed."""
    return Question(
        item=item.id,
        kind="by hand",
        title="Output state unknown: switch it off by hand",
        do=f"{how} Switch the supply off by hand at its own switch, and pull its plug from the unit.",
        why="Nothing that benchkit knows says that the output is off.",
        caution="Treat the unit as live until its rails have been seen low.",
        choices=(DONE,),
    )


def supply_off(item: Item) -> Question:
    """Ask a person to switch off a supply that only a person switches."""
    return Question(
        item=item.id,
        kind="by hand",
        title="Switch the supply off by hand",
        do=f"{item.title}: switch the output off at the supply itself, look that it shows no output, then say so.",
        why="benchkit has no hand on this supply: that it is off stands in the record as said by you.",
        caution="Treat the unit as live until its rails have been seen low.",
        choices=(DONE,),
    )


def lamp_off(item: Item) -> Question:
    """Ask a person to take mains off a unit on the series lamp."""
    return Question(
        item=item.id,
        kind="by hand",
        title="Switch the mains off by hand, and pull the plug",
        do="Switch off at the series lamp, and pull the unit's mains plug. Then say that it is done.",
        why="benchkit has no hand on the series lamp, and can't see whether it is off.",
        caution="Treat the unit as live until its rails have been seen low.",
        choices=(DONE,),
    )


def expected_text(limits: Limits) -> str:
    """What a reading should be, in one line."""
    text = str(limits)
    if limits.nominal is not None:
        text += f", nominal {quantities.show(limits.nominal, limits.unit)}"
    return f"{text} ({limits.source})"


def model_limits(limits: PointLimits, condition: str, allow: float = 0.0) -> Limits:
    """Limits from a prediction, widened by `allow` (in their unit) on either side."""
    source = f"the model: {condition}"
    if allow:
        source += f", ±{quantities.show(allow, limits.unit)} allowed"
    low = None if limits.low is None else limits.low - allow
    high = None if limits.high is None else limits.high + allow
    return Limits(low, high, limits.nominal, limits.unit, source)


THIS_UNIT: Final = "this unit"
"""Where narrowed limits come from, in words; those that are not narrowed are the design's."""


def unit_limits(limits: NarrowedLimits, design: Limits, allow: float = 0.0) -> Limits | None:
    """Narrowed limits of a reading, widened by `allow` and never wider than the design's; None where they are those."""
    if limits.low is None and limits.high is None:
        return None
    low = None if limits.low is None else limits.low - allow
    high = None if limits.high is None else limits.high + allow
    if design.low is not None:
        low = design.low if low is None else max(low, design.low)
    if design.high is not None:
        high = design.high if high is None else min(high, design.high)
    if (low, high) == (design.low, design.high) or (low is not None and high is not None and low > high):
        return None
    return Limits(low, high, None, design.unit, THIS_UNIT)
