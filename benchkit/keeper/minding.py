"""Whether those are still there on whom a supply that is on depends: plain arithmetic, the time is an argument.

`Screen` minds the screen and the computer: heartbeats, the parent, suspension, a keeper that stood still itself.
`Freshness` minds the instruments: how old the last look at the supply is, and the last good reading of the meter.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

from benchkit.keeper.protocol import HEARTBEAT_LIMIT_S, IDLE_HEARTBEAT_LIMIT_S

SLEEP_JUMP_S = 1.0
"""A suspension longer than this is one, s."""

STANDSTILL_S = 1.0
"""A loop that stood still for longer watched nothing meanwhile, s."""

SUPPLY_AGE_S = 2.5
"""So old may the last answer of a supply get that the keeper watches by itself, s (our own figure: a slow serial link
needs a second for a look, and may have to do so twice)."""

SETTING_S = 5.0
"""So long may a setting take while the supply is watched, s (our own figure: many messages over a slow serial link, and
no more): nobody sees meanwhile what the supply does."""

FIRST_READING_S = 3.0
"""So much longer than its limit may the first reading of a meter take that a watch depends on, s."""

UNASKED_TIMES = 5.0
"""So many times its limit may a reading's age become while nobody asks for a new one."""


@dataclass(frozen=True, kw_only=True)
class Loss:
    """Somebody who is gone: who, in words why, and whether the keeper has nobody left to serve."""

    who: str
    problem: str
    leaving: bool = False


class Screen:
    """Minds the screen and the computer.

    Parameters
    ----------
    now_s : float
        The steady clock, s.
    slept_s : callable
        Returns how long the computer has been suspended so far, s.
    parent : callable
        Returns the parent's process id, or None where that says nothing.
    """

    def __init__(self, now_s: float, slept_s: Callable[[], float], parent: Callable[[], int | None]) -> None:
        self.armed = False
        self._slept = slept_s
        self._parent = parent
        self._first_parent = parent()
        self._slept_s = slept_s()
        self._beat_s = now_s
        self._looked_s = now_s
        self._was_on = True

    def beat(self, now_s: float) -> None:
        """Note a heartbeat, at the time at which it was read."""
        self._beat_s = now_s

    def arm(self, now_s: float, *, on: bool) -> None:
        """From now on heartbeats count, or no more."""
        self.armed = on
        self._beat_s = now_s
        self._slept_s = self._slept()

    def look(self, now_s: float, *, output_on: bool) -> Loss | None:
        """Return who is gone, or None.

        Parameters
        ----------
        now_s : float
            The steady clock, s.
        output_on : bool
            Whether the supply should be on: then a suspension or a standstill counts, armed or not, and heartbeats may
            not be late.  Who has it switched on is there: heartbeats count from then.
        """
        if output_on and not self._was_on:
            self._beat_s = max(self._beat_s, now_s)
        self._was_on = output_on
        stood_s, self._looked_s = now_s - self._looked_s, now_s
        if self._first_parent is not None and self._parent() != self._first_parent:
            return Loss(who="the screen", problem="its process is gone", leaving=True)
        slept_s = self._slept() - self._slept_s
        if slept_s > SLEEP_JUMP_S:
            self._slept_s += slept_s
            self._beat_s = now_s
            if self.armed or output_on:
                return Loss(who="the screen", problem=f"the computer slept for {slept_s:.0f} s")
        if output_on and stood_s > STANDSTILL_S:
            self._beat_s = now_s
            return Loss(who="the keeper", problem=f"the keeper stood still for {stood_s:.1f} s and watched nothing")
        limit_s = HEARTBEAT_LIMIT_S if output_on else IDLE_HEARTBEAT_LIMIT_S
        if self.armed and now_s - self._beat_s > limit_s:
            return Loss(who="the screen", problem=f"no heartbeat for {now_s - self._beat_s:.1f} s", leaving=True)
        return None


class Freshness:
    """Minds how old what is known of supply and meter is, while a watch depends on it."""

    def __init__(self) -> None:
        self._supply_s = math.inf
        self._settings = 0
        self._setting_s = math.inf
        self._meter_limit_s: float | None = None
        self._meter_s = 0.0
        self._longest_s = FIRST_READING_S
        self._asked_s: float | None = None
        self._samples = 1

    @property
    def meter_counts(self) -> bool:
        """Whether something depends on the meter now."""
        return self._meter_limit_s is not None

    def supply_from(self, now_s: float | None) -> None:
        """From now on the supply's age counts; None: no more."""
        self._supply_s = math.inf if now_s is None else now_s

    def supply_heard(self, now_s: float) -> None:
        """Note an answer of the supply."""
        if self._supply_s < math.inf:
            self._supply_s = now_s

    def setting_begun(self, now_s: float) -> None:
        """Note that the supply is being set: that is many messages, each with a time-out of its own."""
        if not self._settings:
            self._setting_s = now_s
        self._settings += 1

    def setting_done(self, now_s: float) -> None:
        """Note that it has been, or that this failed, which is somebody else's to deal with."""
        self._settings -= 1
        self._setting_s = now_s
        self.supply_heard(now_s)

    def meter_from(self, now_s: float, limit_s: float | None) -> None:
        """From now on something depends on the meter; None: no more."""
        self._meter_limit_s = limit_s
        self._meter_s = now_s
        self._longest_s = FIRST_READING_S

    def reading_begun(self, now_s: float, samples: int = 1) -> None:
        """Note that the meter has been asked for so many samples."""
        self._asked_s, self._samples = now_s, max(samples, 1)

    def reading_done(self, now_s: float, *, good: bool) -> None:
        """Note that it has answered, or failed to."""
        asked_s, self._asked_s = self._asked_s, None
        if good and asked_s is not None:
            took_s = (now_s - asked_s) / self._samples
            first = self._longest_s == FIRST_READING_S
            self._longest_s = took_s if first else max(self._longest_s, took_s)
            self._meter_s = now_s

    def overdue(self, now_s: float) -> Loss | None:
        """Return which instrument has been silent for too long, or None.

        Notes
        -----
        A meter that was asked may take its own time, as the longest reading so far did, and the limit besides.  One
        that nobody asked is not to blame: then the age of its last reading may be `UNASKED_TIMES` the limit.
        """
        if self._settings:
            if self._supply_s < math.inf and now_s - self._setting_s > SETTING_S:
                words = f"a setting has taken it {now_s - self._setting_s:.1f} s, and nobody watched meanwhile"
                return Loss(who="the supply", problem=words)
        elif now_s - self._supply_s > SUPPLY_AGE_S:
            age_s = now_s - self._supply_s
            return Loss(who="the supply", problem=f"it has not answered for {age_s:.1f} s while it was watched")
        if self._meter_limit_s is None:
            return None
        if self._asked_s is not None:
            silent_s = now_s - self._asked_s
            if silent_s > self._meter_limit_s + self._longest_s * self._samples:
                words = f"asked {silent_s:.1f} s ago it has not answered, and a watch depended on it"
                return Loss(who="the meter", problem=words)
            return None
        age_s = now_s - self._meter_s
        if age_s > UNASKED_TIMES * self._meter_limit_s + self._longest_s:
            return Loss(who="the meter", problem=f"no fresh reading for {age_s:.1f} s while a watch depended on it")
        return None
