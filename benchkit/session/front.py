"""What the session and whoever faces the person say to each other.

The session shows a `View` (a whole frozen picture of the walk, each time anything changed) and puts one `Question` at
a time.  A front end only displays and returns a `Reply`; it decides nothing.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final, Literal, Protocol

from benchkit.events import SupplyState, Verdict
from benchkit.judge.advice import Mood
from benchkit.procedure.actions import Question

READ_BY_HAND: Final = "read by hand"
"""The name of the meter where a person is it."""

Energised = Literal["off", "on", "unknown"]


@dataclass(frozen=True, kw_only=True)
class SectionView:
    """One section of the procedure: how far it is and the worst verdict in it so far."""

    name: str
    title: str
    done: int
    total: int
    current: bool
    verdict: Verdict | None


@dataclass(frozen=True, kw_only=True)
class ResultView:
    """One judged reading or rule, newest last.  Texts are ready to show, numbers are for drawing.

    `low` and `high` are the design's limits, `unit_low` and `unit_high` this unit's inside them, where there are any.
    """

    item: str
    title: str
    value_text: str
    low_text: str
    high_text: str
    verdict: Verdict
    why: str
    value: float | None = None
    low: float | None = None
    high: float | None = None
    uncertainty: float | None = None
    from_before: bool = False
    overridden: str = ""
    unit_low: float | None = None
    unit_high: float | None = None
    unit_low_text: str = ""
    unit_high_text: str = ""
    odd: bool = False


@dataclass(frozen=True, kw_only=True)
class SupplyView:
    """What is known of the supply, in words that are never more certain than the knowledge.

    Parameters
    ----------
    energised : {"off", "on", "unknown"}
    words : str
    by_hand : bool
        Only a person switches what feeds the unit.
    state : SupplyState or None
    label : str
        The state in two or three words, where those for `energised` would say too much or too little; "" where not.
    hint : str
        How it is switched off, where neither a key nor a hand with F9 after it is the answer; "" where one is.
    calm : bool
        Nobody knows whether it is on, and nothing is wrong: it is being set, or has not been asked yet.
    never_on : bool
        Only a person switches it, and this walk has not asked anybody yet to switch it on.
    """

    energised: Energised
    words: str
    by_hand: bool
    state: SupplyState | None
    label: str = ""
    hint: str = ""
    calm: bool = False
    never_on: bool = False


@dataclass(frozen=True, kw_only=True)
class LiveView:
    """A reading that is being watched: while the screw is turned, or while a soak comes to rest.

    Parameters
    ----------
    point, unit : str
    value : float or None
        In `unit`; None when there is none (overload, a probe that slipped).
    text : str
        The value, ready to show.
    low, high, target : float
        The limits that it has to end in, and what is aimed at.
    age_s : float
    inside : bool
        The value lies inside the limits now.
    trend : tuple of (float, float)
        (seconds, value), oldest first, at most a few hundred.
    mood : str
        What is going on, for colour and shape; what it means in words stands in `advice`.
    advice : str
        One line, ready to show: "a quarter turn anticlockwise", "hold: it is still rising".
    advised_turns : float or None
        Turns of the screw that are advised, positive for more bias; None where nothing is to be turned.
    rate_text : str
        "rising 0.12 mV/min"; "" while it can't be told.
    settles_text : str
        "will rest at 20.4 mV ± 0.2 mV, in 1 min 40 s"; "" while it can't be told.
    settled_share : float or None
        How far a soak is, 0 to 1.
    predicted : tuple of (float, float)
        What is expected from now on, on the time axis of `trend`.
    settles_low, settles_high : float or None
        Where it will come to rest, 95 % interval.
    capture : str
        How far a reading without hands is: "at rest 1.2 s of 2.0 s", "probe not on the point"; "" where none is due.
    captured : int
        Grows by one with each value taken: the bell rings.
    """

    point: str
    unit: str
    value: float | None
    text: str
    low: float
    high: float
    target: float
    age_s: float
    inside: bool
    trend: tuple[tuple[float, float], ...] = ()
    mood: Mood = "turn"
    advice: str = ""
    advised_turns: float | None = None
    rate_text: str = ""
    settles_text: str = ""
    settled_share: float | None = None
    predicted: tuple[tuple[float, float], ...] = ()
    settles_low: float | None = None
    settles_high: float | None = None
    capture: str = ""
    captured: int = 0


@dataclass(frozen=True, kw_only=True)
class AimView:
    """What the reading that is to be taken should be: the design's limits, and this unit's inside them.

    `unit_text` is "" as long as nothing narrows the design's.
    """

    point: str
    design_text: str
    unit_text: str = ""


@dataclass(frozen=True, kw_only=True)
class SuspectView:
    """One suspect: name, share of the probability (0 to 1, and in words), what else fits, what speaks for it.

    `share_text` is "" where nothing explains the readings: a share among bad explanations is no probability.
    """

    title: str
    share: float
    share_text: str
    alike: str = ""
    evidence: tuple[str, ...] = ()


@dataclass(frozen=True, kw_only=True)
class SuspectsView:
    """What would explain the readings.

    Parameters
    ----------
    item : str
        The item that it was asked about.
    working : bool
        It is being worked out; nothing waits for it.
    heading : str
        The answer in a sentence.
    suspects : tuple of SuspectView
        The few likeliest.
    unseen, next_step : str
        What the readings could not have shown, and which reading would tell most.
    accuses : bool
        Something is put before a healthy unit.
    """

    item: str
    working: bool
    heading: str
    suspects: tuple[SuspectView, ...] = ()
    unseen: str = ""
    next_step: str = ""
    accuses: bool = False


@dataclass(frozen=True, kw_only=True)
class View:
    """Everything that a screen shows, at one moment.

    `busy` says what is being waited for ("" when the person is), with `busy_share` from 0 to 1 where it is known and
    `remaining_s` where it can be counted down. `kept` is how many lines of the record are on the disk. `narrowing`
    says that limits of this unit are being worked out, for which nobody has to wait. `aim` and `suspects` are None
    where there is nothing to say. `why` says what kept the verdict from being better.
    `broken` names, at the end of a rehearsal, the parts of the simulated unit that have failed, or says that none has.
    `elapsed_s` is the time since this channel was begun and `target_time_s` what the procedure allows for it; `channel`
    names it, "" for the only one.  `next_probe` says where the probes go after the reading that is being taken.
    """

    kind: Literal["walk", "rehearsal"]
    procedure: str
    purpose: str
    unit: str
    operator: str
    design: str
    meter: str
    record: str
    sections: tuple[SectionView, ...]
    section_title: str
    item: str
    item_title: str
    item_number: int
    item_count: int
    results: tuple[ResultView, ...]
    supply: SupplyView
    live: LiveView | None
    busy: str
    busy_share: float | None
    remaining_s: float | None
    message: str
    kept: int
    verdict: Verdict | None
    stopped: str
    exit_status: int | None
    narrowing: bool = False
    aim: AimView | None = None
    suspects: SuspectsView | None = None
    why: str = ""
    broken: str = ""
    elapsed_s: float | None = None
    target_time_s: float | None = None
    channel: str = ""
    next_probe: str = ""


@dataclass(frozen=True, kw_only=True)
class Reply:
    """What the person answered.

    Parameters
    ----------
    choice : str
        The value of one of the question's choices.
    text : str
        What was typed: the entry, or the reason where the choice wants one.
    turns : float
        Only in a rehearsal's trim, with the choice ``turn``: turns of the screw, positive for more bias.
    """

    choice: str
    text: str = ""
    turns: float = 0.0


class Front(Protocol):
    """Whoever faces the person: a screen, plain lines, or a stand-in."""

    def show(self, view: View) -> None:
        """Display a picture of the walk.  Called on the event loop; must return at once."""

    async def ask(self, question: Question, refused: str = "") -> Reply:
        """Put a question and wait for the reply.

        `refused` says why the last reply to the same question could not be used ("" at first).  The call is cancelled
        when something else has happened meanwhile (a trip, off): then the question has gone.
        """
