"""Everything on the simulated bench table: supply leads, unit, meter clips, and its own time.

Time stands still except in `Table.advance`.  The unit is not on the supply's leads at first, the clips are in the air,
and the trimmer stands wherever the last person left it.

What the meter finds
--------------------
* A clip place is a test point.  On d.c. volts it finds the voltage between the point's two nodes, whatever the point
  is meant for; on ohms and diode, what an unpowered unit shows there.  Ohms on a circuit that holds a voltage adds that
  voltage divided by the test current: a number, and a wrong one.
* Across rail capacitors ohms counts up, from the moment when the clips went on.
* Clips in the air read hum and noise on volts, and overload on ohms.  A clip that slips off is in the air for a while,
  floats on what it last touched, and comes back as one that has just been moved.
* On a.c. volts it finds the room's hum, and at the output whatever the stage is driven to or does by itself.
* Reservoirs that have been discharged come back a little (`benchkit.rehearsal.absorption`): a rail that was seen low is
  looked at twice.
* The meter's 10 Mohm loads the circuit: the ratio of loaded to bare voltage is found where the clips are, and found
  again when the operating point there has changed by more than `sensing.RATIO_HOLDS`.
"""

from __future__ import annotations

import math
from typing import Final, Protocol

from benchkit.errors import EntryError
from benchkit.rehearsal.absorption import Absorption
from benchkit.rehearsal.driving import LOAD_OHM, Drive
from benchkit.rehearsal.meter import Sensed
from benchkit.rehearsal.mishaps import FOLDED_SHARE, Mishap
from benchkit.rehearsal.rails import STRAY_F, Channel, Pair, Rails
from benchkit.rehearsal.sensing import Senses
from benchkit.rehearsal.supply import Terminals
from benchkit.rehearsal.unit import COARSE_K, FINE_K, HEATING_K, SimulatedUnit, rails_of
from benchkit.stage.operate import Solved
from benchkit.stage.points import Point, find_point

LEADS_OHM: Final = 0.02
"""Resistance of the supply's leads when they are shorted together."""
_KNEES_IN_LIMIT = 3.0 * 0.010
_NO_RAILS: Final = (Channel(), Channel())
_LEAST_STEP_S = 1e-4
_FALLEN_V = 0.3
_FALLEN_SHARE = 0.05


class Minder(Protocol):
    """What watches the leads while time passes: the supply's own protection."""

    def patience_s(self) -> float:
        """Return how long (s) things may stay as they are before the minder acts."""
        ...

    def mind(self, seconds: float) -> None:
        """Look at the leads after some time, and act."""
        ...


class Table:
    """The bench table.

    Parameters
    ----------
    unit : SimulatedUnit
    """

    def __init__(self, unit: SimulatedUnit) -> None:
        self.unit = unit
        rails = unit.design.rails
        self.capacitance_f = (rails.reservoir_f or 0.0) + (rails.local_capacitors_f or 0.0)
        bleed_ohm = math.inf if rails.bleed is None else rails.bleed.value
        self._absorbed = tuple(
            Absorption(rails.reservoir_f or 0.0, rails.local_capacitors_f or 0.0, bleed_ohm) for _ in (0, 1)
        )
        self.rails = Rails(max(self.capacitance_f, STRAY_F))
        self.minder: Minder | None = None
        self.sim_s = 0.0
        self.energy_j = 0.0
        self.connected = False
        self.shorted = False
        self._channels = _NO_RAILS
        self._asked = _NO_RAILS
        self._folded: float | None = None
        self._waiting: list[Mishap] = []
        self._turned = 0.0
        self._senses = Senses(self)

    # -- hands ---------------------------------------------------------------------------------------------------

    def probe(self, name: str | None) -> None:
        """Clip the meter to a test point; None takes the clips off.

        Raises
        ------
        EntryError
            When the design has no such point.
        """
        self._senses.put(None if name is None else find_point(self.unit.design, name))

    def connect(self, connected: bool) -> None:
        """Put the unit on the supply's leads, or take it off."""
        self.connected = connected
        self._disturb()

    def short(self, shorted: bool) -> None:
        """Join the supply's leads, or open them."""
        self.shorted = shorted
        if shorted and self.connected:
            self.rails.empty()
        self._disturb()

    def turn(self, turns: float) -> float:
        """Turn the trimmer, positive for more bias; return its travel."""
        if self.powered():
            self._turned += abs(turns)
        travel = self.unit.turn(turns)
        for mishap in [one for one in self._waiting if self._turned >= one.after_turns]:
            self._waiting.remove(mishap)
            self.befall(mishap)
        self._disturb()
        return travel

    def set_travel(self, travel: float) -> float:
        """Put the trimmer at a travel from its least-bias end; return it."""
        self.unit.set_travel(travel)
        self._disturb()
        return self.unit.travel

    def drive(self, share: float, load_ohm: float = LOAD_OHM) -> None:
        """Play a sine of a share of full power into a dummy load; 0 ends it.

        Raises
        ------
        EntryError
            For a share outside 0...1, or a load that is none.
        """
        if not 0.0 <= share <= 1.0:
            raise EntryError(f"{share} came as a share of full power", "a number from 0 to 1")
        if not load_ohm > 0.0:
            raise EntryError(f"{load_ohm} ohm came as a dummy load", "more than zero ohms")
        self.unit.beyond.drive = Drive(self.unit.design, share, load_ohm) if share else None
        self._disturb()

    def slip(self, seconds: float) -> None:
        """Let the clips slip off their point for some seconds; then they are on it again."""
        if not (math.isfinite(seconds) and seconds > 0.0):
            raise EntryError(f"{seconds} s came as the time of a slip", "a finite number of seconds, more than zero")
        self._senses.slip(seconds)

    def befall(self, mishap: Mishap) -> None:
        """Let something go wrong: now, or when the screw has been turned so far under power."""
        if mishap.after_turns > self._turned:
            self._waiting.append(mishap)
        elif mishap.trouble == "folds back":
            self.fold(FOLDED_SHARE)
        else:
            self.unit.befall(mishap)
            self._disturb()

    def fold(self, share: float | None) -> None:
        """Let the supply give no more than a share of the limit that it is set to; None makes it well again."""
        self._folded = share
        for channel, asked in enumerate(self._asked, 1):
            self.program(channel, asked.volts, asked.limit_a, asked.on)

    def repair(self) -> tuple[str, ...]:
        """Put new parts in for faulty and burnt ones; return their names.

        Raises
        ------
        EntryError
            While the unit is powered.
        """
        if self.powered():
            raise EntryError("The unit is powered", "the supply off before anybody solders")
        self._waiting.clear()
        parts = self.unit.repair()
        self._disturb()
        return parts

    # -- the supply's side ---------------------------------------------------------------------------------------

    def program(self, channel: int, volts: float, limit_a: float, on: bool) -> None:
        """Take over what channel 1 or 2 of the supply truly delivers from now on."""
        asked, channels = list(self._asked), list(self._channels)
        asked[channel - 1] = Channel(volts, limit_a, on)
        self._asked = asked[0], asked[1]
        channels[channel - 1] = Channel(volts, limit_a * (1.0 if self._folded is None else self._folded), on)
        if (channels[0], channels[1]) != self._channels:
            self._channels = channels[0], channels[1]
            self._disturb()

    def terminals(self, channel: int) -> Terminals:
        """Return the true state of channel 1 or 2 of the supply."""
        rail = channel - 1
        setting = self._channels[rail]
        if self.shorted:
            amps = min(setting.limit_a, setting.volts / LEADS_OHM) if setting.on else 0.0
            return Terminals(amps * LEADS_OHM, amps, setting.on and amps >= setting.limit_a > 0.0)
        if not self.connected:
            return Terminals(setting.volts if setting.on else 0.0, 0.0, False)
        if not self._settled():
            amps = self.rails.delivered[rail] if setting.on else 0.0
            below = self.rails.volts[rail] < setting.volts - _KNEES_IN_LIMIT * setting.limit_a
            return Terminals(self.rails.volts[rail], amps, below and amps >= setting.limit_a > 0.0)
        if not setting.on:
            return Terminals(self._unfed_v(rail), 0.0, False)
        volts, amps = self._settled_rail(self.now(COARSE_K), rail)
        return Terminals(volts, amps, volts < setting.volts - _KNEES_IN_LIMIT * setting.limit_a)

    def _settled_rail(self, solved: Solved, rail: int) -> tuple[float, float]:
        name = ("rail+", "rail-")[rail]
        if name not in solved.points:  # nothing hangs on the second output
            return self._channels[rail].volts, 0.0
        volts = float(solved.points[name][0]) * (1.0, -1.0)[rail]
        return max(volts, 0.0), float(solved.points[f"{name}.current"][0]) + self.unit.beyond.extra_a(rails_of(solved))

    def _disturb(self) -> None:
        self._senses.forget()
        on_leads = self.connected and not self.shorted
        self.rails.disturb(self._channels if on_leads else _NO_RAILS)

    @property
    def channels(self) -> tuple[Channel, Channel]:
        """What the supply's two channels are set to deliver."""
        return self._channels

    # -- time ----------------------------------------------------------------------------------------------------

    def advance(self, seconds: float) -> None:
        """Let simulated time pass.

        Parameters
        ----------
        seconds : float
            Zero or more.

        Raises
        ------
        EntryError
            For a time that is negative or not finite.
        """
        if not (math.isfinite(seconds) and seconds >= 0.0):
            raise EntryError(f"{seconds} s came as time to pass", "a finite number of seconds, zero or more")
        left_s = seconds
        self.rails.go_on()
        while left_s > 1e-12:
            most_s = left_s if self.minder is None else min(left_s, max(self.minder.patience_s(), _LEAST_STEP_S))
            if self.asleep():
                self.unit.heat_off(most_s)
                for absorbed in self._absorbed:
                    absorbed.rest(most_s)
                step_s = most_s
            elif self._settled():
                step_s = self._settled_step(most_s)
            else:
                step_s = self._moving_step(most_s)
            left_s -= step_s
            self.sim_s += step_s
            if self.minder is not None:
                self.minder.mind(step_s)

    def _settled_step(self, left_s: float) -> float:
        solved = self.now(HEATING_K)
        volts_0, amps_0 = self._settled_rail(solved, 0)
        volts_1, amps_1 = self._settled_rail(solved, 1)
        if self._fell((volts_0, volts_1)):
            self._disturb()  # it has come to draw more than the limit: what the capacitors hold goes in first
            return 0.0
        step_s = min(left_s, self.unit.longest_step_s(solved))
        self.rails.follow((volts_0, volts_1))
        self._account(step_s, (volts_0, volts_1), (amps_0, amps_1))
        self._heat(solved, step_s)
        return step_s

    def _fell(self, volts: Pair) -> bool:
        """Whether settled rails are about to fall further than they may without their charge being counted."""
        before = self.rails.volts
        return any(
            before[rail] - volts[rail] > max(_FALLEN_V, _FALLEN_SHARE * before[rail]) and self._channels[rail].on
            for rail in (0, 1)
        )

    def _moving_step(self, left_s: float) -> float:
        latest = self.unit.latest
        most_s = left_s if latest is None else self.unit.stands_s(latest, left_s)
        step_s = self.rails.step(self.unit, most_s)
        if step_s > 0.0:
            self._account(step_s, self.rails.volts, self.rails.delivered)
            # Known at the step's beginning and at its end: what a fast discharge puts in lies between the two.
            after = self.unit.latest or self.now(HEATING_K)
            self._heat(latest or after, 0.5 * step_s)
            self._heat(after, 0.5 * step_s)
        return step_s

    def _heat(self, solved: Solved, seconds: float) -> None:
        broken = len(self.unit.broken)
        self.unit.heat(solved, seconds)
        if len(self.unit.broken) != broken:
            self._disturb()

    def _settled(self) -> bool:
        return self.rails.settled or self.rails.begin(self.unit)

    def _account(self, seconds: float, volts: Pair, amps: Pair) -> None:
        for absorbed, rail_v in zip(self._absorbed, volts, strict=True):
            absorbed.follow(rail_v, seconds)
        if self.connected and not self.shorted:
            self.energy_j += seconds * sum(volts[rail] * amps[rail] for rail in (0, 1) if self._channels[rail].on)

    def asleep(self) -> bool:
        """Whether nothing powers the unit and its rails are empty."""
        return self.rails.settled and max(self.rails.volts) <= 0.0 and not self.powered()

    def _unfed_v(self, rail: int) -> float:
        """The magnitude at a rail that nothing feeds: of its capacitors, and of what they give back (V)."""
        return max(self.rails.volts[rail], self._absorbed[rail].back_v)

    def given_back_v(self, rail: int) -> float:
        """Return the magnitude that a rail's reservoir has given back after it was emptied (V)."""
        return self._absorbed[rail].back_v

    def unfed_v(self) -> Pair:
        """Return the magnitudes at both rails' capacitors (V)."""
        return self._unfed_v(0), self._unfed_v(1)

    def powered(self) -> bool:
        """Whether the supply feeds the unit."""
        on = any(channel.on and channel.volts > 0.0 and channel.limit_a > 0.0 for channel in self._channels)
        return on and self.connected and not self.shorted

    def now(self, within_k: float = FINE_K) -> Solved:
        """Return the unit's operating point at this moment."""
        return self.unit.operate(*self.feeding(), within_k=within_k)

    def feeding(self) -> tuple[Pair, float | None]:
        """What feeds the unit: settings and limit of the supply when settled, else its own capacitors."""
        if not (self._settled() and self.powered()):
            return self.rails.volts, None
        live = [channel.on and channel.volts > 0.0 and channel.limit_a > 0.0 for channel in self._channels]
        volts = [channel.volts if on else 0.0 for channel, on in zip(self._channels, live, strict=True)]
        limit_a = min(channel.limit_a for channel, on in zip(self._channels, live, strict=True) if on)
        return self.unit.sagged((volts[0], volts[1]), limit_a), limit_a

    # -- the meter's side ----------------------------------------------------------------------------------------

    @property
    def point(self) -> Point | None:
        """Where the clips were put; None in the air."""
        return self._senses.point

    @property
    def probe_moves(self) -> int:
        """How often the clips have been moved, a slip's way back included."""
        return self._senses.moves

    @property
    def since_probe_s(self) -> float:
        """Simulated time (s) since the clips were last moved."""
        return self._senses.since_s

    def sense(self, function: str, full_scale: float | None) -> Sensed:
        """Return what a function of the meter finds between its clips."""
        return self._senses.sense(function, full_scale)
