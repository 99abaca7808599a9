"""Advice for the hand on the screw: which way, about how much, and what it means when the reading does something else.

Rules
-----
* Arithmetic is done on what follows the screw evenly (`benchkit.judge.screw.Scale`), not on the reading itself, so that
  one figure, its change for each turn, serves the whole track.
* That figure comes from the model first, and from this unit once it has answered a move.  Nobody tells the adviser how
  far a hand has turned, unless in a rehearsal: it takes the advised turns for turned and trusts by half what it learns.
* As long as this unit has not answered, no advice is more than half of what the model says; none is ever more than
  `benchkit.judge.turning.MOST_TURNS`.
* A move is seen as such: the reading leaves a stretch in which it was calm and comes to another.  What creeps stays
  calm, and is no answer.
* "Steady" is only what is near the target, and what it comes to rest at too: within half of the tolerance, and clear of
  the limits by what the meter leaves open.  Inside, but not near, the advice goes on.
* When the reading does not follow where any healthy unit would (`benchkit.judge.silence`), the words say so.
* A reading that falls away at once is a wiper that has opened or a probe that has slipped.  The supply's current tells
  which, where it is known.
* More bias is advised only on a reading that is known to be of the point (`benchkit.judge.trust`).
"""

from __future__ import annotations

import math
from typing import Final

from benchkit.judge.advice import Advice, Mood, Source
from benchkit.judge.answers import Answers, OfSlope
from benchkit.judge.falls import LEAST_TURNS, Falls, fall_words, fell_first
from benchkit.judge.screw import KNEE_V, Scale, taken_for
from benchkit.judge.silence import Silence
from benchkit.judge.stillness import CALM_S, Stillness
from benchkit.judge.trust import AGAIN, MORE_BIAS, ROSE, SLIPPED, SWAPPED, UNSTEADY, Kept, RailLine, Trust
from benchkit.judge.turning import Turning, near

STANDING_SHARE: Final = 0.03
"""How well it is known what a rail draws without bias, as a share of that: feeds have tolerances (our own figure)."""


class Adviser:
    """Watches a reading while a screw is turned, and says what to turn.

    Parameters
    ----------
    target, low, high : float
        What the reading should be, and its limits.
    slope : float or None
        Change of the reading at `full` for a turn towards more bias, by the model, temperatures held; None without.
    more_way : str
        The way to turn for more bias: "clockwise" or "anticlockwise".
    turns : float
        From end to end of the screw.
    noise : float
        Standard deviation of a reading, or what the meter resolves.
    knee : float
        In the reading's unit; 0 for one that follows the screw evenly.
    full : float, optional
        The reading at which `slope` holds; by default `target`.
    settled_share : float
        How much more a move does once all has come to rest than at once.
    calm_s : float
        How long a stretch has to be; 0 where each reading was typed in by somebody who waited for it.
    standing : float
        What is read without any bias.
    unit : str
        Of the reading, for the words.
    answers : Answers, optional
        What may be expected of healthy units; without, what the slope says.
    line : RailLine, optional
        What the supply's current should be at a reading.
    by_supply : bool
        The reading is the supply's own, with no probe.
    """

    def __init__(
        self,
        target: float,
        low: float,
        high: float,
        *,
        slope: float | None,
        more_way: str,
        turns: float,
        noise: float,
        knee: float = KNEE_V,
        full: float | None = None,
        settled_share: float = 1.0,
        calm_s: float = CALM_S,
        standing: float = 0.0,
        unit: str = "V",
        answers: Answers | None = None,
        line: RailLine | None = None,
        by_supply: bool = False,
    ) -> None:
        self._target, self._low, self._high = target, low, high
        self._track = turns
        self._noise = max(noise, 1e-6 * abs(target))
        floor = max(self._noise, 1e-4 * abs(target - standing), STANDING_SHARE * abs(standing))
        self._scale = Scale(target=target, knee=knee, floor=floor, standing=standing)
        self._turning = Turning(
            self._scale, low, high, more_way=more_way, track=turns, settled_share=settled_share, unit=unit
        )  # fmt: skip
        self._answers = answers
        self._guard = 0.0
        self._stillness = Stillness(self._scale, (high - low) / 2.0, calm_s)
        place = target if full is None else full
        self._slope = None if slope is None or slope <= 0.0 else slope * self._scale.steepness(place)
        self._source: Source = "nothing yet" if self._slope is None else "the model"
        self._calm: tuple[float, float] | None = None  # time and value when it was last calm
        self._told = 0.0
        self._known: float | None = None  # turns that are known to have been made and not been answered yet
        self._silence = Silence(turns, self._turning.amount)
        self._trust = Trust(self._scale, track=turns, typed=calm_s == 0.0, by_supply=by_supply, line=line)
        self._resumed = False  # trusted again, and not compared yet with what was before
        self._followed = False
        self._falls = Falls(self._scale)
        self._fault: Mood | None = None
        self._fell: tuple[float, float] | None = None  # when it fell away, and to what
        self._rail_a: float | None = None  # the supply's current when the reading was last calm
        self._moved_s: float | None = None

    def scatters(self, noise: float) -> None:
        """Take note of how much readings of this point scatter, as soon as that is known."""
        self._noise = max(noise, 1e-6 * abs(self._target))

    def guards(self, distance: float) -> None:
        """Take note of how far inside the limits a reading has to be for this meter to be sure of it."""
        self._guard = distance

    def near(self, value: float) -> bool:
        """Whether a reading is so near the target that nothing needs to be turned."""
        below, above = (near(half, self._guard) for half in (self._target - self._low, self._high - self._target))
        return -below <= value - self._target <= above

    @property
    def slope_source(self) -> Source:
        """What the amount of the advice rests on."""
        return self._source

    @property
    def slope(self) -> float | None:
        """Change of the reading at the target for a turn towards more bias, as it is known now."""
        return None if self._slope is None else self._slope / self._scale.steepness(self._target)

    def proven(self, value: float, rail_a: float | None) -> bool:
        """Whether a reading is known to be of the point: it followed a turn, was off and on, or the current agrees."""
        if self._followed or self._trust.was_off:
            return True
        return self._trust.agrees(value, self._noise, rail_a) is True

    def hears_of_turns(self) -> None:
        """Take note that every move will be told, as in a rehearsal."""
        self._silence.watches_turns()

    def turned(self, turns: float) -> None:
        """Take note of a move that somebody has made; only a rehearsal knows of one."""
        if turns:
            self._trust.moved()
            self._known = (self._known or 0.0) + turns
            self._silence.turned(turns)
            if self._calm is None:
                self._calm = self._stillness.last
            self._stillness.clear()

    def add(
        self,
        t_s: float,
        value: float | None,
        *,
        folded: bool = False,
        rest: float | None = None,
        running_away: bool = False,
        rail: tuple[float, float] | None = None,
        gone: str = "",
    ) -> Advice:
        """Take a reading and say what to do.

        Parameters
        ----------
        t_s, value : float
            None for an overload.
        folded : bool
            The supply is in its limit.
        rest : float, optional
            Where the reading will come to rest, where that is known well enough to aim by.
        running_away : bool
            The reading rises by itself, faster and faster.
        rail : (float, float), optional
            The supply's current, where it is known, behind the time at which it was read.
        gone : str
            Why the reading is not of the point, "" when it is.
        """
        if running_away:
            return self._say("running away", "it rises by itself, faster and faster: off", None, calm=False)
        if folded:
            words = f"the supply is in its limit: {self._turning.amount(-0.5)}. The reading says nothing meanwhile"
            return self._say("folded back", words, -0.5, calm=False)
        value = value if value is not None and math.isfinite(value) else None
        if gone and value is not None and self._fell is None and self._current_fell(t_s, value, rail):
            self._fell = (t_s, value)
        off = value is None or (bool(gone) and self._fell is None)
        doubt = self._doubt(t_s, None if off else value, rail)
        if value is None or off:
            self._stillness.clear()
            why = gone or "overload"
            return self._say("gone", f"the reading is gone ({why}): put the probe back on the point", None, calm=False)
        self._resumed |= self._trust.resumed
        if (self._trust.resumed or doubt in (ROSE, AGAIN)) and self._fell is None:
            self._look_back(t_s, value, rail)
        calm = self._stillness.add(t_s, value, self._noise)
        fresh_a = rail[1] if rail is not None and rail[0] >= t_s - self._stillness.calm_s - 1e-9 else None
        if calm and self._trust.was_wrong(value, self._noise, fresh_a, self._kept):
            self._calm, self._rail_a, self._fell, self._resumed, doubt = None, None, None, False, ""
        if self._fell is not None and value < 1.5 * self._fell[1] + 6.0 * self._noise and doubt != SWAPPED:
            return self._fallen(rail, calm=calm)
        if doubt:
            return self._say("gone", doubt, None, calm=False)
        if self._fell is not None:
            if not self._is_back(t_s, value, rail, calm=calm):
                return self._fallen(rail, calm=calm)
            self._fell, self._resumed = None, True
        if self._resumed and not calm:
            return self._say("gone", UNSTEADY, None, calm=False)
        if calm and self._trust.contradicts(value, self._noise, self._kept, fresh_a):
            return self._say("gone", SLIPPED, None, calm=False)
        moved_s = self._moved_s
        if calm:
            self._compare(t_s, value, rail)
            if self._fell is not None:
                return self._fallen(rail, calm=calm)
        if self._trust.resumed and self._moved_s != moved_s:
            calm = False  # what comes is a new stretch, for whoever follows its trend
        fallen = not calm and self._trust.has_fallen(value, self._noise, self._kept)
        self._falls.trusted(t_s, value)
        advice = self._judge(t_s, value, rest, calm=calm)
        if (advice.turns or 0.0) > 0.0 and fallen:
            return self._say(advice.mood, "let it come to rest", None, calm=False)
        if (advice.turns or 0.0) > 0.0 and self._trust.shows_more_bias(value, fresh_a):
            self._told = 0.0
            return self._say("gone", MORE_BIAS, None, calm=False)
        return advice

    @property
    def _kept(self) -> Kept | None:
        return None if self._calm is None else Kept(value=self._calm[1], rail_a=self._rail_a)

    def _doubt(self, t_s: float, value: float | None, rail: tuple[float, float] | None) -> str:
        """Ask whether a reading is to be trusted."""
        kept, turned = self._kept, self._known if self._known is not None else self._told
        fell = value is not None and kept is not None and self._fell_away(kept.value, value, turned)
        return self._trust.look(
            t_s, value, noise=self._noise, slope=self._slope, turned=turned, kept=kept, fell=fell, rail=rail
        )  # fmt: skip

    def _is_back(self, t_s: float, value: float, rail: tuple[float, float] | None, *, calm: bool) -> bool:
        """Whether a reading that had fallen away is of the point again."""
        told = self._known if self._known is not None else self._told
        speaks = self._trust.speaks_for(t_s, value, self._noise, self._slope, told, self._kept, rail)
        return calm if speaks is None else speaks

    # -- seeing moves ------------------------------------------------------------------------------------------

    def _still(self, value: float) -> float:
        return self._stillness.limit(value, self._noise)

    def _compare(self, t_s: float, value: float, rail: tuple[float, float] | None) -> None:
        """Compare a calm stretch with the one before it."""
        u = self._scale.even(value)
        before, self._calm = self._calm, (t_s, value)
        resumed, self._resumed = self._resumed, False
        if before is None:
            self._rail_a = None if rail is None else rail[1]
            self._known = None
            self._silence.answered()
            return
        moved = u - self._scale.even(before[1])
        far = abs(moved) > 2.0 * self._still(min(value, before[1]))
        turned = self._known if self._known is not None else self._told
        if resumed and not self._fell_away(before[1], value, turned):
            # What it did in between nobody has seen: it teaches nothing.
            self._moved_s = t_s if far else self._moved_s
            self._known = None
            self._silence.answered()
            self._rail_a = None if rail is None else rail[1]
            return
        if not far and self._known is None:
            if self._fell is None and rail is not None and not fell_first(self._rail_a, rail[1]):
                self._rail_a = rail[1]
            return
        if self._fell_away(before[1], value, turned):
            self._fell, self._calm = (t_s, value), before
            if not self._falls.current_tells(before[1]):
                self._rail_a = None  # so little current of its own that the supply's says nothing
            self._known = None
            return
        self._moved_s = t_s
        self._answer(moved, turned, before[1], value)
        self._known = None
        self._rail_a = None if rail is None else rail[1]

    def _fell_away(self, before: float, value: float, turned: float) -> bool:
        return self._falls.away(before, value, turned, self._slope, self._noise)

    def _look_back(self, t_s: float, value: float, rail: tuple[float, float] | None) -> None:
        """See whether a reading that stands again has fallen from one that was still on its way up, never calm."""
        peak, turned = self._falls.peak, self._known if self._known is not None else self._told
        back = peak is not None and self._falls.to_the_start(peak[1], value, turned, self._noise)
        if peak is None or not (back or self._fell_away(peak[1], value, turned)):
            return
        if self._calm is not None and self._fell_away(self._calm[1], value, turned):
            return  # it is seen when the two are compared
        fresh_a = rail[1] if rail is not None and rail[0] > peak[0] else None
        self._fell, self._calm = (t_s, value), peak
        self._rail_a = self._trust.current_before(peak[1], value, self._noise, fresh_a)
        self._known = None

    def _current_fell(self, t_s: float, value: float, rail: tuple[float, float] | None) -> bool:
        """Whether the supply's current says that the bias is gone, and not only the probe."""
        if self._calm is None or rail is None or self._rail_a is None or rail[0] <= self._calm[0]:
            return False
        if not self._falls.with_current(self._calm[1], self._rail_a, rail[1]):
            return False
        return self._fell_away(self._calm[1], value, 0.0)

    def _fallen(self, rail: tuple[float, float] | None, *, calm: bool) -> Advice:
        """Say what it means that the reading has fallen away."""
        assert self._fell is not None
        known = rail is not None and rail[0] > self._fell[0] - self._stillness.calm_s
        mood, words = fall_words(self._rail_a, rail[1] if known and rail is not None else None)
        return self._say(mood, words, None, calm=calm)

    def _answer(self, moved: float, turned: float, before: float, value: float) -> None:
        """Learn from a move, and say whether it went the right way."""
        goal = self._scale.even(self._target)
        answered = abs(moved) > 2.0 * self._still(min(value, before))
        if not answered:
            return
        self._fault = None
        self._silence.answered()
        wanted = goal - self._scale.even(before)
        inside = self._low <= value <= self._high
        was_inside = self._low <= before <= self._high
        if moved * wanted < 0.0 and not inside and not was_inside:
            self._fault = "wrong way"
        elif (goal - self._scale.even(value)) * wanted < 0.0 and not inside:
            self._fault = "overshot"
        if moved * turned <= 0.0 or abs(turned) < LEAST_TURNS:
            return
        self._followed = True
        seen = moved / turned
        if self._slope is not None:
            seen = min(max(seen, 0.2 * self._slope), 5.0 * self._slope)
            trust = 0.8 if self._known is not None else 0.5
            seen = math.exp((1.0 - trust) * math.log(self._slope) + trust * math.log(seen))
        self._slope, self._source = seen, "this unit"

    # -- saying what to do -------------------------------------------------------------------------------------

    def _judge(self, t_s: float, value: float, rest: float | None, *, calm: bool) -> Advice:
        inside = self._low <= value <= self._high
        aim = value if rest is None else rest
        if inside:
            self._fault = None
            self._silence.hushed()
        if inside and self.near(aim) and self.near(value):
            self._told = 0.0
            if calm:
                return self._say("steady", "leave it: it is where it should be", None, calm=True)
            return self._say("inside", "hands off: let it come to rest", None, calm=False)
        if self._known is not None:
            return self._say(self._fault or ("inside" if inside else "turn"), "let it come to rest", None, calm=calm)
        if rest is not None and self.near(rest):
            self._told = 0.0
            self._silence.hushed()
            way = "rising" if rest > value else "falling"
            return self._say("inside" if inside else "turn", f"hold: it is still {way}", None, calm=calm)
        by_rest, by_model = rest is not None, self._source == "the model"
        turns = self._turning.wanted(value, aim, self._slope, by_model=by_model, by_rest=by_rest)
        if calm:
            self._told = math.copysign(taken_for(abs(turns), self._track), turns)
            self._silence.told(t_s, value)
        words = self._turning.amount(turns)
        if inside:
            return self._say("inside", self._turning.inside(value, rest, words), turns, calm=calm)
        answers = self._answers or (None if self._slope is None else OfSlope(self._scale, self._slope))
        silent = self._silence.look(t_s, value, self._told, answers, self._noise)
        if silent is not None:
            return self._say("no response", silent[0], silent[1], calm=True)
        if self._fault == "overshot":
            slack = self._turning.slack(t_s) if turns < 0.0 else ""
            return self._say("overshot", f"too far: {words}{slack}", turns, calm=calm)
        if self._fault == "wrong way":
            return self._say("wrong way", f"that was the wrong way: {words}", turns, calm=calm)
        words += self._turning.of_how_many(turns, aim, self._slope, by_rest=by_rest)
        words += self._silence.hint(value, turns, self._answers, self._noise)
        return self._say("turn", words, turns, calm=calm)

    def _say(self, mood: Mood, words: str, turns: float | None, *, calm: bool) -> Advice:
        return Advice(
            mood=mood, words=words, turns=turns, slope_source=self._source, calm=calm, moved_s=self._moved_s
        )  # fmt: skip
