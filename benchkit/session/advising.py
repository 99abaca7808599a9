"""What a trim tells and shows: its adviser, made of what the model knows, and the picture of one moment."""

from __future__ import annotations

from typing import TYPE_CHECKING, Final

from benchkit import quantities
from benchkit.judge.advice import Advice
from benchkit.judge.answers import Answers
from benchkit.judge.trimming import Adviser
from benchkit.judge.trust import RailLine
from benchkit.measure.readings import Reading
from benchkit.procedure.actions import Trim
from benchkit.session.creeping import Creep, Told
from benchkit.session.front import LiveView

if TYPE_CHECKING:
    from benchkit.session.predictions import Screw
    from benchkit.session.run import Session

LOOP_SHARE: Final = 0.8
"""How much of the model's loop gain from temperature to power a move is expected to find in this unit; our own figure,
on the side of too little: what is missing then is seen to come, and a move back is not needed."""


def settled_share(screw: Screw, rested: float) -> float:
    """Return how much more a move from a rest to the target does once all has come to rest again than at once.

    Notes
    -----
    At the target it is 1/(1 - g) with the loop gain g, which is about proportional to the current: on the way from
    `rested` it is that of the middle.
    """
    gain = 1.0 - 1.0 / screw.settled_share
    full = screw.full - screw.standing
    middle = (min(max(rested - screw.standing, 0.0), full) + full) / (2.0 * full)
    return 1.0 / (1.0 - LOOP_SHARE * middle * gain)


def adviser_for(
    action: Trim,
    screw: Screw,
    noise: float,
    answers: Answers | None,
    line: RailLine | None,
    *,
    calm_s: float | None = None,
) -> Adviser:
    """Make the adviser of a trim."""
    more = {} if calm_s is None else {"calm_s": calm_s}
    return Adviser(
        action.target, action.low, action.high,
        slope=screw.per_turn,
        more_way=screw.more_way,
        turns=screw.turns,
        noise=noise,
        knee=screw.knee,
        full=screw.full,
        settled_share=screw.settled_share,
        standing=screw.standing,
        unit=action.unit,
        answers=answers,
        line=line,
        by_supply=action.function == "dc current",
        **more,
    )  # fmt: skip


def live_view(
    session: Session,
    action: Trim,
    reading: Reading,
    advice: Advice,
    told: Told,
    creep: Creep | None = None,
    capture: str = "",
) -> LiveView:
    """Put together what a screen shows of a trim at one moment."""
    value = reading.value
    return LiveView(
        point=action.point,
        unit=action.unit,
        value=value,
        text="overload" if value is None else quantities.show(value, action.unit, 4),
        low=action.low,
        high=action.high,
        target=action.target,
        age_s=0.0,
        inside=value is not None and action.low <= value <= action.high,
        trend=() if creep is None else creep.trend.points(),
        mood=advice.mood,
        advice=advice.words,
        advised_turns=advice.turns,
        rate_text=told.rate_text,
        settles_text=told.settles_text,
        predicted=told.predicted,
        settles_low=told.settles_low,
        settles_high=told.settles_high,
        capture=capture,
        captured=session.captured,
    )
