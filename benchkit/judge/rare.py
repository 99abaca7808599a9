"""Readings just outside the limits: what a walk of some sixty readings makes of them.

The model's limits hold 99.73 % of good units at *each* point.  A walk takes some sixty readings, so that about one
good unit in fifteen shows a reading outside somewhere (counted over simulated units), and the more points are read the
more good units would be stopped.  So a walk fails a reading only where it lies farther outside than `RARE_SHARE` of the
limits' half-width: for a normal distribution that is 3.9 instead of 3 standard deviations, one unit in 10,000 at each
point, and less than one in a hundred over a walk (Bonferroni's inequality).  Between the two a reading is *rare*:
undecided by itself.  What decides is all readings together: when the model, asked for the suspects, holds a good unit
the likeliest and finds that it explains everything read, up to `MOST_RARE` rare readings don't keep a unit from
passing, and the record says so.

This holds for limits that the model made.  A target, a limit that a procedure states, and a named rule are what they
are.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Final

from benchkit.judge.limits import Limits
from benchkit.measure.readings import Reading

RARE_SHARE: Final = 0.3
"""So far outside, as a share of the limits' half-width, a reading is rare and no failure (our own figure)."""

MOST_RARE: Final = 4
"""More rare readings than this in one walk leave it undecided (our own figure).  One part at the end of its tolerance
shows in two or three readings: a junction cold, the same one under power, the drop beside it."""


def is_rare(reading: Reading, limits: Limits) -> bool:
    """Whether a reading that did not pass lies so near to the model's limits that a good unit may well read it.

    Parameters
    ----------
    reading : Reading
    limits : Limits
        Of the model; with an open side nothing is near.
    """
    if reading.overload or reading.value is None or limits.low is None or limits.high is None:
        return False
    wide = widened(limits)
    assert wide.low is not None
    assert wide.high is not None
    return wide.low <= reading.value <= wide.high


def widened(limits: Limits) -> Limits:
    """Return the model's limits with what is rare on both sides; unchanged when a side is open."""
    if limits.low is None or limits.high is None:
        return limits
    spare = RARE_SHARE * (limits.high - limits.low) / 2.0
    return replace(limits, low=limits.low - spare, high=limits.high + spare)
