"""Whether a reading is of the point at all: advice for more bias rests on nothing less.

Rules
-----
* A reading that is clearly negative is of swapped probes or of another point.
* What changes quicker than a hand can turn, or comes back after it was gone, is doubted until it has stood for
  `STEADY_S` and something speaks for it: it is near the last reading that was trusted, as far as the screw has been
  turned since; or the supply's current agrees; or, where no current tells, the probes were taken off and put on again
  and it reads the same.
* A slower fall brings no advice for more before it has ended, and is doubted when the supply's current has not fallen.
* What lies above the target needs no such proof: the advice is for less.
* Where entries are typed, a fall that no advised move explains is asked for once more.
* The supply's current is held against the model's line: standing current, and so much for each unit of the reading.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

from benchkit.judge.screw import Scale

NEGATIVE_SHARE: Final = 0.05
NEGATIVE_NOISES: Final = 3.0
"""Below zero by more than this share of the target and so many times the noise a reading is negative."""

HAND_TURNS_PER_S: Final = 3.0
HAND_TRACKS_PER_S: Final = 0.5
"""No hand turns a screw quicker than this, nor than this part of its track (our own figures)."""

STRONGER: Final = 2.0
"""A unit may answer so many times more than what is known of it says."""

STEADY_S: Final = 1.5
LEAST_STEADY: Final = 3
STEADY_SHARE: Final = 0.02
STEADY_NOISES: Final = 8.0
"""Steady: so long (s), in so many readings, within this share of the target or so many times the noise."""

SMALL_SHARE: Final = 0.01
SMALL_NOISES: Final = 10.0
"""A change below this share of the target, or so many times the noise, is no jump."""

SLACK_TURNS: Final = 0.3
"""A hand may have turned by so much without being told."""

NEAR_SHARE: Final = 0.15
"""A reading within this share of the last trusted one is near it."""

AGREES_WITHIN: Final = 1.0 / 3.0
STANDING_KNOWN: Final = 0.1
LEAST_KNOWN: Final = 0.05
"""The current agrees when what it leaves for the bias is within this share of it, or of this share of the standing
current, or of this share of the target's; feeds have tolerances (our own figures)."""

CURRENT_KNOWN: Final = 0.02
"""Of two currents of the same unit."""

CURRENT_FELL_TO: Final = 0.9
"""The supply's current has fallen with a reading when it is below this share of itself."""

MORE_BIAS_SHARE: Final = 0.4
MORE_BIAS_OWN: Final = 0.6
MORE_STANDING: Final = 0.15
"""Beyond these shares of the target's current, of the reading's own, and of the standing one, the supply carries bias
that the reading does not show."""

OFF_S: Final = 0.4
LEAST_OFF: Final = 3
"""The probe was off when it was seen off for so long (s), in so many readings."""

SWAPPED: Final = "it reads negative: the probes are swapped, or on another point. No turns"
UNSTEADY: Final = "look at the probe: no turns until the reading has stood for a moment"
SLIPPED: Final = "the reading fell at once, the supply's current did not: the probe has slipped"
ROSE: Final = "the reading rose at once, the supply's current did not: is the probe on the point? No turns"
AGAIN: Final = "the reading is another than before: take the probe off the point and put it on again. No turns"
TYPE_AGAIN: Final = (
    "it has fallen, and no advised turn explains it: look at the probes, then type what they read. No turns"
)
MORE_BIAS: Final = (
    "the supply's current shows more bias than this reading: is the probe on the point, does the stage oscillate? "
    "No turns"
)


@dataclass(frozen=True, kw_only=True)
class RailLine:
    """What the model says of the supply's current.

    Parameters
    ----------
    standing_a : float
        Without any bias (A).
    per_unit : float
        More for each unit of the reading (A).
    """

    standing_a: float
    per_unit: float


@dataclass(frozen=True, kw_only=True)
class Kept:
    """The last reading that was trusted.

    Parameters
    ----------
    value : float
    rail_a : float or None
        The supply's current with it; None where that says nothing.
    """

    value: float
    rail_a: float | None


class Trust:
    """Watches every reading of a trim.

    Parameters
    ----------
    scale : Scale
    track : float
        Turns from end to end; 0 where that is not known.
    typed : bool
        Each reading was typed in by somebody.
    by_supply : bool
        The reading is the supply's own: there is no probe that could slip.
    line : RailLine, optional
    """

    def __init__(
        self, scale: Scale, *, track: float, typed: bool = False, by_supply: bool = False, line: RailLine | None = None
    ) -> None:
        self._scale, self._typed, self._by_supply = scale, typed, by_supply
        self._line = None if by_supply else line
        self._quickest = min(HAND_TURNS_PER_S, HAND_TRACKS_PER_S * track) if track else HAND_TURNS_PER_S
        self._before: tuple[float, float] | None = None
        self._doubted = False
        self._stretch: tuple[float, float, float, int] | None = None  # since when, lowest, highest, how many
        self._refused: float | None = None
        self._second_look: float | None = None
        self._off: tuple[float, int] | None = None
        self.was_off = False
        self.resumed = False

    def moved(self) -> None:
        """Take note of a move that is known of: the next reading may be anywhere."""
        self._before = None

    def look(
        self,
        t_s: float,
        value: float | None,
        *,
        noise: float,
        slope: float | None,
        turned: float,
        kept: Kept | None,
        fell: bool,
        rail: tuple[float, float] | None,
    ) -> str:
        """Take a reading; say why it isn't to be trusted, "" when it may be or when it is gone anyway.

        Parameters
        ----------
        t_s, value : float
            None while the reading is gone.
        noise : float
        slope : float or None
            Change of what follows the screw evenly, for each turn.
        turned : float
            What has been turned since the last trusted reading, as far as that is known, or else was advised.
        kept : Kept or None
        fell : bool
            It has fallen away: nothing will be advised, so that nothing has to be proven.
        rail : (float, float) or None
            Time and supply's current.
        """
        self.resumed = False
        if value is None:
            self._gone(t_s)
            return ""
        self._off = None
        target = self._scale.target
        if value < -max(NEGATIVE_NOISES * noise, NEGATIVE_SHARE * abs(target)):
            self._doubt()
            self._before = None
            return SWAPPED
        if self._by_supply:
            self._doubted = False
            return ""
        if self._typed:
            return self._entry(value, noise, slope, turned, kept, fell=fell)
        before, self._before = self._before, (t_s, value)
        if before is not None and self._jumps(before, t_s, value, noise, slope):
            self._doubt()
        return self._steady(t_s, value, noise, slope, turned, kept, fell=fell, rail=rail) if self._doubted else ""

    def speaks_for(
        self, t_s: float, value: float, noise: float, slope: float | None, turned: float, kept: Kept | None,
        rail: tuple[float, float] | None,
    ) -> bool | None:  # fmt: skip
        """Whether a steady reading is of the point; None where nothing tells."""
        if value >= self._scale.target or (kept is not None and self._near(value, noise, slope, turned, kept)):
            return True
        fresh_a = rail[1] if rail is not None and rail[0] >= t_s - STEADY_S else None
        agrees = self.agrees(value, noise, fresh_a, kept)
        if agrees is None and kept is None:
            return True
        return agrees

    def agrees(self, value: float, noise: float, rail_a: float | None, kept: Kept | None = None) -> bool | None:
        """Whether the supply's current agrees with a reading; None where it can't tell."""
        if rail_a is None:
            return None
        by_line = self._by_line(value, noise, rail_a)
        found = [] if by_line is None else [by_line]
        if kept is not None and kept.rail_a is not None:
            found += self._since_kept(value, rail_a, kept, kept.rail_a)
        return any(found) if found else None

    def _by_line(self, value: float, noise: float, rail_a: float) -> bool | None:
        """Hold the current against the model's line; None where the standing current hides the bias."""
        line = self._line
        if line is None:
            return None
        whole = line.per_unit * abs(self._scale.target)
        if STANDING_KNOWN * line.standing_a > AGREES_WITHIN * whole:
            return None
        bias = line.per_unit * max(value, 0.0)
        room = max(AGREES_WITHIN * bias, STANDING_KNOWN * line.standing_a, LEAST_KNOWN * whole)
        return abs(rail_a - line.standing_a - bias) <= max(room, 3.0 * noise * line.per_unit)

    def current_before(self, before: float, value: float, noise: float, rail_a: float | None) -> float | None:
        """Return what the current was at a reading from which another has fallen, by the line.

        None where the current of now speaks neither for the one reading alone nor for the other.
        """
        line = self._line
        if line is None or rail_a is None:
            return None
        match self._by_line(before, noise, rail_a), self._by_line(value, noise, rail_a):
            case True, False:
                return rail_a  # it stands
            case False, True:
                before_a = line.standing_a + line.per_unit * before
                return before_a if rail_a < CURRENT_FELL_TO * before_a else None
        return None

    def was_wrong(self, value: float, noise: float, rail_a: float | None, kept: Kept | None) -> bool:
        """Whether it was the last trusted reading that was of another point, by the current: believe this one.

        So it is when the first readings are still of the point before.
        """
        if kept is None or kept.rail_a is None or rail_a is None:
            return False
        if self._by_line(kept.value, noise, kept.rail_a) is not False or not self._by_line(value, noise, rail_a):
            return False
        self._doubted = False
        return True

    def _since_kept(self, value: float, rail_a: float, kept: Kept, before_a: float) -> list[bool]:
        """Hold the current's change against the reading's."""
        line = self._line
        if line is not None:
            due = line.per_unit * (value - kept.value)
            if abs(due) < 3.0 * CURRENT_KNOWN * before_a:
                return []
            room = max(AGREES_WITHIN * abs(due), CURRENT_KNOWN * before_a)
            return [abs(rail_a - before_a - due) <= room]
        if abs(rail_a - before_a) <= CURRENT_KNOWN * before_a:
            return [False]  # it stands, and the reading does not
        return [(rail_a - before_a) * (value - kept.value) > 0.0] if abs(rail_a - before_a) > 0.1 * before_a else []

    def contradicts(self, value: float, noise: float, kept: Kept | None, rail_a: float | None) -> bool:
        """Whether a reading has fallen since the last trusted one, and the supply's current says otherwise.

        If so it is doubted from now on.
        """
        if self._line is None or not self.has_fallen(value, noise, kept):
            return False
        if self.agrees(value, noise, rail_a, kept) is not False or self._fell_as_far(value, rail_a, kept):
            return False
        self._doubt()
        return True

    def _fell_as_far(self, value: float, rail_a: float | None, kept: Kept | None) -> bool:
        """Whether the current has fallen by what the reading has lost, or more: a wiper takes drivers' current too."""
        if self._line is None or rail_a is None or kept is None or kept.rail_a is None:
            return False
        due_a = self._line.per_unit * (kept.value - value)
        fell_a = kept.rail_a - rail_a
        return due_a >= 3.0 * CURRENT_KNOWN * kept.rail_a and fell_a >= (1.0 - AGREES_WITHIN) * due_a

    def has_fallen(self, value: float, noise: float, kept: Kept | None) -> bool:
        """Whether a reading is below the target, and well below the last trusted one."""
        if kept is None or self._by_supply or value >= self._scale.target:
            return False
        least = max(SMALL_NOISES * noise, NEGATIVE_SHARE * abs(self._scale.target), NEAR_SHARE * abs(kept.value))
        return kept.value - value > least

    def shows_more_bias(self, value: float, rail_a: float | None) -> bool:
        """Whether the supply carries bias that a reading does not show."""
        line = self._line
        if line is None or rail_a is None:
            return False
        unseen = rail_a - line.standing_a - line.per_unit * max(value, 0.0)
        least = line.per_unit * max(MORE_BIAS_SHARE * abs(self._scale.target), MORE_BIAS_OWN * value)
        return unseen > MORE_STANDING * line.standing_a + least

    # -- doubt ---------------------------------------------------------------------------------------------------

    def _gone(self, t_s: float) -> None:
        since_s, many = self._off or (t_s, 0)
        self._off = since_s, many + 1
        if many + 1 >= LEAST_OFF and t_s - since_s >= OFF_S:
            self.was_off = True
            self._second_look = self._refused
        self._before = None
        if not self._typed:
            self._doubt()

    def _doubt(self) -> None:
        self._doubted, self._stretch = True, None

    def _jumps(self, before: tuple[float, float], t_s: float, value: float, noise: float, slope: float | None) -> bool:
        """Whether a reading has changed quicker than a hand can turn."""
        scale = self._scale
        if abs(value - before[1]) <= max(SMALL_NOISES * noise, SMALL_SHARE * abs(scale.target)):
            return False
        moved = abs(scale.even(value) - scale.even(before[1]))
        most = 0.5 * scale.target * scale.steepness(scale.target)
        if slope is not None:
            most = slope * STRONGER * self._quickest * max(t_s - before[0], 0.1)
        return moved > most

    def _steady(
        self, t_s: float, value: float, noise: float, slope: float | None, turned: float, kept: Kept | None, *,
        fell: bool, rail: tuple[float, float] | None,
    ) -> str:  # fmt: skip
        since_s, low, high, many = self._stretch or (t_s, value, value, 0)
        low, high = min(low, value), max(high, value)
        room = max(STEADY_NOISES * noise, STEADY_SHARE * abs(self._scale.target), STEADY_SHARE * abs(value))
        if high - low > room:
            since_s, low, high, many = t_s, value, value, 0
        self._stretch = since_s, low, high, many + 1
        if t_s - since_s < STEADY_S - 1e-9 or many + 1 < LEAST_STEADY:
            return UNSTEADY
        speaks = True if fell else self.speaks_for(t_s, value, noise, slope, turned, kept, rail)
        if speaks is None and self._same(value, self._second_look, noise):
            speaks = True
        if speaks:
            self._doubted, self._refused, self._second_look, self.resumed = False, None, None, True
            return ""
        if speaks is None:
            self._refused = value
            return AGAIN
        if kept is None:
            return MORE_BIAS if self.shows_more_bias(value, None if rail is None else rail[1]) else ROSE
        return SLIPPED if value < kept.value else ROSE

    def _same(self, value: float, other: float | None, noise: float) -> bool:
        if other is None:
            return False
        return abs(value - other) <= max(SMALL_NOISES * noise, STEADY_SHARE * abs(self._scale.target), 0.1 * abs(other))

    def _near(self, value: float, noise: float, slope: float | None, turned: float, kept: Kept) -> bool:
        """Whether a reading follows from the last trusted one, by what has been turned since."""
        small = max(SMALL_NOISES * noise, SMALL_SHARE * abs(self._scale.target), NEAR_SHARE * abs(kept.value))
        if abs(value - kept.value) <= small:
            return True
        if slope is None:
            return False
        moved = (self._scale.even(value) - self._scale.even(kept.value)) / slope
        return min(STRONGER * turned, 0.0) - SLACK_TURNS <= moved <= max(STRONGER * turned, 0.0) + SLACK_TURNS

    def _entry(
        self, value: float, noise: float, slope: float | None, turned: float, kept: Kept | None, *, fell: bool
    ) -> str:
        """Judge a typed entry: a fall has to be explained, or to be typed twice."""
        falls = kept is not None and value < kept.value and value < self._scale.target
        if not falls or kept is None or fell or self._near(value, noise, slope, min(turned, 0.0), kept):
            self._refused = None
            return ""
        if self._same(value, self._refused, noise):
            self._refused = None
            self.resumed = True
            return ""
        self._refused = value
        return TYPE_AGAIN
