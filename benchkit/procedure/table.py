"""The table of transitions: which events each phase of a walk takes, and which method of the walk handles them.

A pair that isn't here is illegal: it raises and changes nothing.  Every phase but ``unopened`` and ``closed`` takes the
events that end in *made safe*, and what the model says of this unit, which it was asked aside.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Final

from benchkit.events import (
    EVENT_KINDS,
    Answered,
    BenchFound,
    BenchMissing,
    Closed,
    ContactLost,
    Decided,
    Event,
    Judged,
    Narrowed,
    Noted,
    OutputOff,
    PartsReplaced,
    Predicted,
    PredictionRefused,
    ReadingMissed,
    ReadingTaken,
    Resumed,
    StopAsked,
    SupplyRefused,
    SupplySet,
    Suspected,
    TrimEnded,
    Tripped,
    Waited,
    WalkOpened,
)
from benchkit.procedure.state import PHASES, Phase

_ALWAYS: Final[Mapping[type[Event], str]] = {
    StopAsked: "_stop_asked",
    Tripped: "_tripped",
    ContactLost: "_contact_lost",
    OutputOff: "_output_went_off",
    Noted: "_noted",
    Resumed: "_resumed",
    Narrowed: "_narrowed",
    Suspected: "_suspected",
}

_OWN: Final[Mapping[Phase, Mapping[type[Event], str]]] = {
    "unopened": {WalkOpened: "_opened"},
    "connecting": {BenchFound: "_bench_found", BenchMissing: "_bench_missing"},
    "asking": {Answered: "_answered", PartsReplaced: "_parts_replaced"},
    "predicting": {Predicted: "_predicted", PredictionRefused: "_prediction_refused"},
    "placing": {Answered: "_placed"},
    "reading": {ReadingTaken: "_reading_taken", ReadingMissed: "_reading_missed"},
    "judging": {Judged: "_judged"},
    "deciding": {Decided: "_decided"},
    "offering": {Decided: "_offered"},
    "setting": {SupplySet: "_supply_set", SupplyRefused: "_supply_refused"},
    "waiting": {Waited: "_waited"},
    "trimming": {ReadingTaken: "_reading_taken", ReadingMissed: "_reading_missed", TrimEnded: "_trim_ended"},
    "switching off": {OutputOff: "_off"},
    "by hand off": {Answered: "_off_by_hand"},
    "securing": {
        BenchFound: "_secure_found",
        BenchMissing: "_secure_missing",
        Decided: "_secure_decided",
        OutputOff: "_secured",
        Answered: "_secured_by_hand",
    },
    "closing": {Closed: "_closed"},
    "closed": {},
}

TABLE: Final[Mapping[tuple[Phase, type[Event]], str]] = {
    (phase, kind): method
    for phase in PHASES
    for kind, method in {**({} if phase in ("unopened", "closed") else _ALWAYS), **_OWN[phase]}.items()
}
"""Phase and kind of event to the name of the method that handles it."""


def table_text() -> str:
    """The table of transitions as text, a line for each phase."""
    lines = []
    for phase in PHASES:
        kinds = [kind.name for kind in EVENT_KINDS if (phase, kind) in TABLE]
        lines.append(f"{phase}: {', '.join(kinds) if kinds else 'takes nothing'}")
    return "\n".join(lines)
