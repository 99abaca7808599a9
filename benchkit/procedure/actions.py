"""What a walk asks for: frozen actions, carried out by whoever runs it.

An action never reports back by itself: what came of it arrives at the walk as an event.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar, Literal

from benchkit.events import Event
from benchkit.stage.conditions import Condition, Unpowered
from benchkit.stage.observations import Conditions, Observation

QuestionKind = Literal[
    "tell", "confirm", "text", "hold", "probes", "decide", "trim", "by hand", "watch", "parts", "choose"
]


@dataclass(frozen=True, kw_only=True)
class Choice:
    """One answer that a question takes.

    Parameters
    ----------
    value : str
        The word that comes back: ``done``, ``yes``, ``no``, ``again``, ``go on``, ``make safe``, ``probe``, ``take``,
        ``end``, ``enough``, ``cancel``, ``trim again``, ``read again``, ``semiconductors``, ``other parts``.
    label : str
        What the screen says.
    wants_reason : bool
        The operator has to say why.
    wanted : str
        What is to be typed, where that is no reason; "" where it is one.
    """

    value: str
    label: str
    wants_reason: bool = False
    wanted: str = ""


@dataclass(frozen=True, kw_only=True)
class Question:
    """Everything that a person needs in order to act and answer.

    Parameters
    ----------
    item : str
        The item that it belongs to.
    kind : str
        ``tell`` (read, then done), ``confirm`` (yes or no), ``text`` (type something), ``hold`` (type yes),
        ``probes`` (place them, then done), ``decide`` (after a result that is no pass, or a reading that is odd),
        ``trim`` (turn the screw, then take), ``by hand`` (something that no instrument does: set the supply, switch
        off), ``watch`` (something goes on by itself and ends by itself; all but the first answer end it early),
        ``parts`` (which parts were replaced: ``no``, ``semiconductors`` or ``other parts``, with their names),
        ``choose`` (whether a section that may be left out is done: ``no`` or ``yes``).
    title, do, why, caution, expected, red, black : str
        The words of the step; empty where there is nothing to say.
    point : str
        The test point, where there is one.
    choices : tuple of Choice
        The first is the usual one.
    """

    item: str
    kind: QuestionKind
    title: str
    do: str
    why: str = ""
    caution: str = ""
    expected: str = ""
    point: str = ""
    red: str = ""
    black: str = ""
    choices: tuple[Choice, ...] = ()


@dataclass(frozen=True, kw_only=True)
class Action:
    """Base of all actions; `item` names the item that it serves.

    An action that is `aside` is carried out beside whatever else is being done and never held up for: readings go on
    meanwhile, and its event may come while the walk is at another item.  A newer one of its kind supersedes it.
    """

    item: str
    aside: ClassVar[bool] = False


@dataclass(frozen=True, kw_only=True)
class Connect(Action):
    """Find the instruments of the bench and prove who they are.  Answer: BenchFound or BenchMissing."""


@dataclass(frozen=True, kw_only=True)
class Ask(Action):
    """Put a question to the operator.  Answer: Answered or Decided."""

    question: Question


@dataclass(frozen=True, kw_only=True)
class Predict(Action):
    """Compute the limits of one condition.  Answer: Predicted or PredictionRefused.

    Parameters
    ----------
    key : str
        The condition's name in the record.
    conditions : tuple of Condition or Unpowered
        One, or several whose limits are joined: a reading is right when it is right under any of them.
    points : tuple of str
        All the points that the plan reads under it.
    """

    key: str
    conditions: tuple[Condition | Unpowered, ...]
    points: tuple[str, ...]


@dataclass(frozen=True, kw_only=True)
class CheckWarm(Action):
    """See whether the design comes to rest warm, before anything else.  Answer: Judged."""

    conditions: tuple[Condition, ...]


@dataclass(frozen=True, kw_only=True)
class Target:
    """A reading that the model is asked about: condition's name and the conditions, point, its unit."""

    key: str
    conditions: Conditions
    point: str
    unit: str


@dataclass(frozen=True, kw_only=True)
class Narrow(Action):
    """Narrow the limits of readings still to come by those that were kept.  Answer: Narrowed, or nothing.

    Parameters
    ----------
    after : int
        Lines in the record when it was asked.
    known : tuple of Observation
        This unit's readings so far.
    near, later : tuple of Target
        Readings still to come: in this section, and in those after it.
    """

    aside: ClassVar[bool] = True
    after: int
    known: tuple[Observation, ...]
    near: tuple[Target, ...]
    later: tuple[Target, ...] = ()


@dataclass(frozen=True, kw_only=True)
class Suspect(Action):
    """Work out what would explain this unit's readings.  Answer: Suspected, or nothing.

    Parameters
    ----------
    after : int
        Lines in the record when it was asked.
    known : tuple of Observation
    candidates : tuple of Target
        Readings that could be taken next, from which the most telling are named.
    names : tuple of (conditions, name)
        How those of `known` are called in the record.
    """

    aside: ClassVar[bool] = True
    after: int
    known: tuple[Observation, ...]
    candidates: tuple[Target, ...]
    names: tuple[tuple[Conditions, str], ...]


@dataclass(frozen=True, kw_only=True)
class Read(Action):
    """Take one reading.  Answer: ReadingTaken or ReadingMissed.

    ``low`` and ``high`` are its limits, as far as they are known; whether it is taken does not depend on them.
    """

    point: str
    function: str
    unit: str
    samples: int = 1
    settle_s: float = 0.0
    low: float | None = None
    high: float | None = None


@dataclass(frozen=True, kw_only=True)
class Fall(Action):
    """Watch a rail fall until it is low, or until it should have been.  Answer: ReadingTaken or ReadingMissed.

    Parameters
    ----------
    question : Question
        What stands on the screen meanwhile.
    low_v : float
        It is low when its magnitude is below this (V).
    tau_s, slowest_tau_s : float or None
        Time constant (s) of the design, and at the far ends of its tolerances; None where nobody knows.
    help : str
        What to do when it doesn't fall, in words.
    """

    question: Question
    point: str
    function: str
    unit: str
    low_v: float
    tau_s: float | None
    slowest_tau_s: float | None
    help: str = ""


@dataclass(frozen=True, kw_only=True)
class SetSupply(Action):
    """Set both rails and the limit, ramping from where they are.  Answer: SupplySet or SupplyRefused.

    Parameters
    ----------
    positive_v, negative_v : float
        Where the rails go; `negative_v` is zero or negative.
    limit_a : float
        Current limit of each rail.
    ramp_s : float
        How long the way takes at least; both rails move together.
    settle_s : float
        How long the stage then has to come to rest before the supply is read back.
    trip_on_limit : bool
        A rail that stays in its limit longer than `grace_s` trips.
    protection_v : tuple of float or None
        Where the over-voltage protection of each rail goes, positive rail first, as magnitudes; None leaves the
        choice to the supply's own rule.
    """

    positive_v: float
    negative_v: float
    limit_a: float
    ramp_s: float = 0.0
    settle_s: float = 0.5
    trip_on_limit: bool = True
    grace_s: float = 0.5
    protection_v: tuple[float, float] | None = None


@dataclass(frozen=True, kw_only=True)
class SwitchOff(Action):
    """Switch the supply off and confirm it.  Answer: OutputOff."""

    reason: str


@dataclass(frozen=True, kw_only=True)
class Wait(Action):
    """Let time pass under watch.  Answer: Waited.

    Parameters
    ----------
    seconds : float
        How long; at most so long where it ends once the reading has settled.
    reason : str
        The words for the screen.
    point, function, unit : str
        What is read meanwhile; "" where nothing is.
    target, low, high : float or None
        Where it should come to rest.
    until_settled : bool
        It ends once the reading has settled, but not before `least_s` (s).
    drift_limit : float
        A reading that moves faster than this (in its unit, per second) has not settled.
    """

    seconds: float
    reason: str
    point: str = ""
    function: str = ""
    unit: str = ""
    target: float | None = None
    low: float | None = None
    high: float | None = None
    until_settled: bool = False
    least_s: float = 0.0
    drift_limit: float = 0.0


@dataclass(frozen=True, kw_only=True)
class Trim(Action):
    """Show the reading live while the screw is turned.  Answer: ReadingTaken or TrimEnded.

    Parameters
    ----------
    question : Question
    point, function, unit : str
        What is read.
    target, low, high : float
        Where it should come to.
    samples : int
        Readings that are averaged when it is taken.
    share : float
        Share of the design's target that is set.
    condition : Condition or None
        Where it happens, for the model's slope; the trimmer at the target.
    """

    question: Question
    point: str
    function: str
    unit: str
    target: float
    low: float
    high: float
    samples: int = 1
    share: float = 1.0
    condition: Condition | None = None


@dataclass(frozen=True, kw_only=True)
class Evaluate(Action):
    """Judge a named rule on the readings so far.  Answer: Judged."""

    rule: str
    number: float | None


@dataclass(frozen=True, kw_only=True)
class Write(Action):
    """Put an event of the walk's own into the record.  It comes back as that event."""

    event: Event
