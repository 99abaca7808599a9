"""The two rails at the unit: capacitors that a current-limited supply charges and the unit discharges.

How a step goes
---------------
Each rail's capacitor is a voltage that changes by (what the supply delivers - what the unit draws) / C.  The supply
delivers its limit while the rail is below its set voltage, exactly what the unit draws while it is there, and nothing
while the rail is above it: a supply of this kind can't sink.

Time constants reach from microseconds (a short across 100 uF) to minutes (10 mF and a bleeder), so steps are chosen by
voltage, not by time: a share of what is left to go, or all of it where the unit's balance says that the rail gets
there, halved where the unit's current turns out to have changed too much on the way (Heun's rule against Euler's).

The end of it is the unit's balance with supply and limit, the same solution that predictions use.  A rail that comes
close to it waits there for the other one (a shorted rail is there in microseconds, the other one takes its time); when
both are close, or nothing moves them any more, they are *settled* and follow the balance from then on.  So they are too
where a faulty unit is so stiff that steps have to be cut short again and again: there the balance comes a little early.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field
from typing import Final, Protocol

STRAY_F: Final = 1e-6
"""Capacitance of a rail without capacitors of its own: leads and the supply's own output."""
EMPTY_V: Final = 0.01

_NEAR_V = 0.02
_NEAR_SHARE = 0.001
_STALLED_SHARE = 0.01
_RISING_SHARE = 0.34
_FALLING_SHARE = 0.2
_LITTLE_SHARE = 0.3
_LEAST_STEP_V = 0.02
_TOLERANCE = 0.15
_HALVINGS = 8
_MOST_STEPS = 150
_MOST_STRUGGLES = 6

Pair = tuple[float, float]


@dataclass(frozen=True)
class Channel:
    """What one channel of the supply truly delivers: magnitudes."""

    volts: float = 0.0
    limit_a: float = 0.0
    on: bool = False


class Load(Protocol):
    """The unit as its rails see it; all magnitudes, positive rail first."""

    def drawn(self, volts: Pair) -> Pair:
        """Return the currents (A) drawn from stiff rails at `volts`."""
        ...

    def balance(self, volts: Pair, limit_a: float) -> Pair:
        """Return the voltages (V) to which a supply at `volts` with a limit brings the rails."""
        ...


@dataclass
class Rails:
    """Voltages of both rails at the unit's own capacitors.

    Parameters
    ----------
    capacitance_f : float
        Of each rail.
    """

    capacitance_f: float
    volts: Pair = (0.0, 0.0)
    settled: bool = True
    highest_v: Pair = (0.0, 0.0)
    _delivered: Pair = (0.0, 0.0)
    _rates: Pair | None = None
    _goal: Pair = (0.0, 0.0)
    _goal_a: Pair = (0.0, 0.0)
    _steps: int = 0
    _struggles: int = 0
    _channels: tuple[Channel, Channel] = field(default=(Channel(), Channel()))

    def disturb(self, channels: tuple[Channel, Channel]) -> None:
        """Take over new settings (or a change in the unit): the rails start moving from where they are."""
        self._channels = channels
        self._rates = None
        self._steps = self._struggles = 0
        self.settled = not any(_delivers(channel) for channel in channels) and max(self.volts) <= EMPTY_V
        if self.settled:
            self.volts = (0.0, 0.0)

    def go_on(self) -> None:
        """Begin another stretch of time: the count of steps starts again."""
        self._steps = 0

    def empty(self) -> None:
        """Take all charge away at once."""
        self.volts = (0.0, 0.0)
        self.disturb(self._channels)

    @property
    def delivered(self) -> Pair:
        """Currents (A) that the supply delivers while the rails are moving."""
        return self._delivered

    def follow(self, volts: Pair) -> None:
        """Note the voltages of settled rails."""
        self.volts = volts
        self._raise_marks()

    def begin(self, load: Load) -> bool:
        """Find out where disturbed rails are heading; return whether they are settled there already."""
        if not self.settled and self._rates is None:
            self._goal = self._find_goal(load)
            self._goal_a = load.drawn(self._goal)
            self._rates = self._find_rates(load.drawn(self.volts), self.volts)
            self._at_rest()
        return self.settled

    def step(self, load: Load, most_s: float) -> float:
        """Move unsettled rails by one step of at most `most_s`; return how long it was (s)."""
        if self.begin(load):
            return 0.0
        assert self._rates is not None
        start, rates = self.volts, self._rates
        seconds = min([most_s, *(self._time_s(rail, start[rail], rates[rail]) for rail in (0, 1))])
        halvings = 0
        while True:
            there = self._moved(start, rates, seconds)
            drawn = load.drawn(there)
            new_rates = self._find_rates(drawn, there)
            # At its set voltage a rail stops; what counts for the way there is how fast it came in.
            ended = [self._coming_in(rail, rates[rail], new_rates[rail], drawn[rail]) for rail in (0, 1)]
            wrong = [abs(ended[rail] - rates[rail]) * seconds / 2.0 for rail in (0, 1)]
            allowed = [_TOLERANCE * max(abs(there[rail] - start[rail]), _LEAST_STEP_V) for rail in (0, 1)]
            arrived = [abs(there[rail] - self._target(rail)) < 1e-9 for rail in (0, 1)]
            easy = [arrived[rail] and rates[rail] <= 0.0 for rail in (0, 1)]
            if halvings == _HALVINGS or all(easy[rail] or wrong[rail] <= allowed[rail] for rail in (0, 1)):
                break
            halvings += 1
            seconds /= 2.0
        if any(_delivers(channel) for channel in self._channels):
            self._struggles = self._struggles + 1 if halvings > 1 else max(self._struggles - 1, 0)
        mean = _pair(rates[rail] if arrived[rail] else (rates[rail] + new_rates[rail]) / 2.0 for rail in (0, 1))
        self.volts = self._moved(start, mean, seconds)
        # The unit was asked at the end of Euler's step, not of Heun's: what changed on the way is taken as linear.
        self._rates = _pair(
            new_rates[rail]
            if arrived[rail] or there[rail] == start[rail]
            else rates[rail]
            + (new_rates[rail] - rates[rail]) * (self.volts[rail] - start[rail]) / (there[rail] - start[rail])
            for rail in (0, 1)
        )
        self._raise_marks()
        self._steps += 1
        self._at_rest()
        return seconds

    def _target(self, rail: int) -> float:
        channel = self._channels[rail]
        return channel.volts if _delivers(channel) else 0.0

    def _find_goal(self, load: Load) -> Pair:
        limits = [channel.limit_a for channel in self._channels if _delivers(channel)]
        if not limits:
            return (0.0, 0.0)
        return load.balance((self._target(0), self._target(1)), min(limits))

    def _find_rates(self, drawn: Pair, volts: Pair) -> Pair:
        delivered, rates = [0.0, 0.0], [0.0, 0.0]
        for rail, channel in enumerate(self._channels):
            target = self._target(rail)
            if self._near_goal(rail, volts[rail]):
                delivered[rail] = min(max(drawn[rail], 0.0), channel.limit_a)
                continue
            if target > 0.0 and volts[rail] < target - 1e-6:
                delivered[rail] = channel.limit_a
            elif target > 0.0 and volts[rail] <= target + 1e-6:
                delivered[rail] = min(max(drawn[rail], 0.0), channel.limit_a)
            rates[rail] = (delivered[rail] - drawn[rail]) / self.capacitance_f
            if volts[rail] <= 0.0 and rates[rail] < 0.0:
                rates[rail] = 0.0
        self._delivered = (delivered[0], delivered[1])
        return rates[0], rates[1]

    def _coming_in(self, rail: int, rate: float, new_rate: float, drawn_a: float) -> float:
        """The rate at a step's end, just below the set voltage where a rising rail has come to stop."""
        if rate <= 0.0 or new_rate != 0.0:
            return new_rate
        return (self._channels[rail].limit_a - drawn_a) / self.capacitance_f

    def _gets_there(self, rail: int) -> bool:
        """Whether a rail reaches its set voltage, with a current to spare that makes its way a straight line."""
        limit_a = self._channels[rail].limit_a
        return abs(self._goal[rail] - self._target(rail)) <= _NEAR_V and self._goal_a[rail] <= _LITTLE_SHARE * limit_a

    def _time_s(self, rail: int, volts: float, rate: float) -> float:
        """How long the rail may move at `rate` before the unit has to be asked again."""
        if rate == 0.0:
            return float("inf")
        target = self._target(rail)
        gap = target - volts
        if rate > 0.0:
            share = 1.0 if self._gets_there(rail) else _RISING_SHARE
            most_v = min(max(share * gap, 0.02 * target, _LEAST_STEP_V), max(gap, 1e-6))
        else:
            most_v = max(_FALLING_SHARE * volts, _LEAST_STEP_V)
        return most_v / abs(rate)

    def _moved(self, volts: Pair, rates: Pair, seconds: float) -> Pair:
        result = []
        for rail in (0, 1):
            target = self._target(rail)
            there = volts[rail] + rates[rail] * seconds
            above = volts[rail] > target
            # A rail stops at its set voltage from either side: below it the supply delivers again.
            there = max(there, target) if above and target > 0.0 else there
            there = min(there, target) if volts[rail] <= target else there
            if abs(there - target) < 1e-6 * max(target, 1.0):
                there = target
            result.append(max(there, 0.0))
        return result[0], result[1]

    def _at_rest(self) -> bool:
        """Settle when both rails are near their goal or stand still; return whether they have."""
        assert self._rates is not None
        rest = [self._rail_at_rest(rail, self._rates[rail]) for rail in (0, 1)]
        if all(rest) or self._steps >= _MOST_STEPS or self._struggles >= _MOST_STRUGGLES:
            self.settled = True
            self.volts = self._goal
            self._raise_marks()
        return self.settled

    def _rail_at_rest(self, rail: int, rate: float) -> bool:
        volts, channel = self.volts[rail], self._channels[rail]
        if not _delivers(channel):
            return volts <= EMPTY_V
        if self._near_goal(rail, volts):
            return True
        return volts <= channel.volts and abs(rate) * self.capacitance_f < _STALLED_SHARE * channel.limit_a

    def _near_goal(self, rail: int, volts: float) -> bool:
        """Whether a supplied rail is where it is going; it then waits there for the other one."""
        if not _delivers(self._channels[rail]) or volts > self._target(rail) + _NEAR_V:
            return False
        return abs(volts - self._goal[rail]) <= max(_NEAR_V, _NEAR_SHARE * self._goal[rail])

    def _raise_marks(self) -> None:
        self.highest_v = (max(self.highest_v[0], self.volts[0]), max(self.highest_v[1], self.volts[1]))


def _pair(values: Iterable[float]) -> Pair:
    """Return exactly two values as a pair."""
    first, second = values
    return first, second


def _delivers(channel: Channel) -> bool:
    return channel.on and channel.volts > 0.0 and channel.limit_a > 0.0
