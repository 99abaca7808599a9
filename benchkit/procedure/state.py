"""Where a walk stands: a frozen picture, made anew by every event."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal

from benchkit.events import Closed, Judged, NarrowedLimits, PointLimits, SupplyState, Suspected, Tripped, WalkOpened
from benchkit.measure.readings import Reading
from benchkit.procedure.items import CLEARS_PROTECTION, Item

Phase = Literal[
    "unopened",
    "connecting",
    "asking",
    "predicting",
    "placing",
    "reading",
    "judging",
    "deciding",
    "offering",
    "setting",
    "waiting",
    "trimming",
    "switching off",
    "by hand off",
    "securing",
    "closing",
    "closed",
]

PHASES: tuple[Phase, ...] = Phase.__args__  # type: ignore[attr-defined]

POWERED_PHASES = frozenset({"asking", "predicting", "placing", "reading", "judging", "deciding", "setting", "waiting",
                            "trimming"})  # fmt: skip
"""Phases in which the supply may be on."""


@dataclass(frozen=True, kw_only=True)
class State:
    """Where a walk stands.

    Parameters
    ----------
    phase : Phase
    index : int
        The item of the plan that is being done.
    count : int
        Events so far, which is the number of lines in the record.
    since_s : float
        When the phase began, in the session's time.
    opened : WalkOpened or None
    meter, supply_name : str
        As the instruments named themselves.
    limits : mapping
        Condition's name to point's name to limits.
    narrowed : mapping
        The same for this very unit, narrowed by its readings.
    readings : mapping
        Item's id to its latest reading.
    results : tuple of Judged
        The standing result of each item, in the order in which they came; a repetition replaces the earlier one.
    attempts : mapping
        Item's id to the number of results that it has had.
    overrides : mapping
        Item's id to the reason with which a result was passed over.
    before : frozenset of str
        Items whose results are from before the walk was resumed, or before parts were replaced.
    outdated : frozenset of str
        Those of them that were read before parts were replaced: they tell of another unit than the present one.
    parts : str
        Which parts were replaced, in the operator's words; "" for none.
    semiconductors : bool
        Whether semiconductors are among them.
    limited : str
        Why the power that the unit had as it was found ended at its limit, where the walk goes on from least bias; ""
        when it did not.
    chosen : frozenset of str
        Sections that may be left out and that the operator wants done.
    trims : mapping
        Item's id to how often the walk went back from it to a trim.
    extras : tuple of Item
        Extra readings that were offered and taken up, in their order; they are items like the plan's.
    extra : str
        The id of the one that is being taken, "" when none is.
    suspecting : int
        The line of the record at which suspects were asked for and not answered yet; 0 when none are awaited.
    suspicion : Suspected or None
        The last answer about suspects.
    offers_left : bool
        On the way out, the operator took no more extra readings.
    resumed_at : int
        The line at which the walk was last resumed, or parts were replaced; what the model was asked before lapses.
    probes : str
        The test point on which the probes are, "" when not known.
    energised : {"off", "on", "unknown"}
    supply : SupplyState or None
        The last that was heard of it.
    highest_v : float
        The highest rail (V) that a supply reading has shown so far.
    stopped : str
        Why the walk is on its way out, "" when it isn't.
    stopped_at : str
        The item at which that happened.
    cut_at : int or None
        The item's number at which whoever ran the walk went away (the screen, its session, the keeper) while nothing
        else had stopped it; such a walk can go on.
    stop_status : int
        The exit status that the stop leads to; 0 while nothing has stopped the walk.
    on_lamp : bool
        The unit is fed through a series lamp, which nothing but a hand switches.
    unprotected : bool
        The supply says of no over-voltage protection of its own.
    broken : str
        At the end of a rehearsal: which parts of the simulated unit have failed, in words.
    ever_on : bool
        The supply has been on in this walk, or nobody knows.
    unconfirmed : bool
        The last "off" could not be confirmed, and nobody has said since that it is off by hand.
    closed : Closed or None
        The last event of a finished walk.
    missing : str
        Why the item that is being decided has no result, "" when it has one.
    note : str
        A sentence for the screen about the last thing that happened.
    tripped : Tripped or None
        The trip that ended the walk: what the supply showed then tells of the unit too.
    keeping : frozenset of str
        Readings that stand while others beside them are taken again for a rule: items that are passed by.
    """

    phase: Phase = "unopened"
    index: int = 0
    count: int = 0
    since_s: float = 0.0
    opened: WalkOpened | None = None
    meter: str = ""
    supply_name: str = ""
    limits: Mapping[str, Mapping[str, PointLimits]] = field(default_factory=dict)
    narrowed: Mapping[str, Mapping[str, NarrowedLimits]] = field(default_factory=dict)
    readings: Mapping[str, Reading] = field(default_factory=dict)
    results: tuple[Judged, ...] = ()
    attempts: Mapping[str, int] = field(default_factory=dict)
    overrides: Mapping[str, str] = field(default_factory=dict)
    before: frozenset[str] = frozenset()
    outdated: frozenset[str] = frozenset()
    parts: str = ""
    semiconductors: bool = False
    limited: str = ""
    chosen: frozenset[str] = frozenset()
    trims: Mapping[str, int] = field(default_factory=dict)
    extras: tuple[Item, ...] = ()
    extra: str = ""
    suspecting: int = 0
    suspicion: Suspected | None = None
    offers_left: bool = False
    resumed_at: int = 0
    probes: str = ""
    energised: Literal["off", "on", "unknown"] = "unknown"
    supply: SupplyState | None = None
    highest_v: float = 0.0
    stopped: str = ""
    stopped_at: str = ""
    cut_at: int | None = None
    stop_status: int = 0
    on_lamp: bool = False
    unprotected: bool = False
    broken: str = ""
    ever_on: bool = False
    unconfirmed: bool = False
    closed: Closed | None = None
    missing: str = ""
    note: str = ""
    tripped: Tripped | None = None
    tripped_at: str = ""
    keeping: frozenset[str] = frozenset()

    def result(self, item: str) -> Judged | None:
        """The standing result of an item."""
        return next((result for result in self.results if result.item == item), None)

    def leaves_out(self, item: Item) -> bool:
        """Whether an item belongs to a section that is not done as things stand; the question itself is always put."""
        if item.limited_to and self.limited:
            return True
        if item.act == CLEARS_PROTECTION and not (self.supply is not None and self.supply.tripped):
            return True
        if item.optional:
            return item.kind != "choose" and item.section not in self.chosen
        match item.only_if:
            case "parts replaced":
                return not self.parts
            case "no parts replaced":
                return bool(self.parts)
            case "semiconductors replaced":
                return not self.semiconductors
            case "no semiconductors replaced":
                return self.semiconductors
            case "from least bias":
                return not (self.parts or self.limited)
        return False
