"""Everything on the simulated bench table: supply leads, unit, meter clips, and its own time.

Time stands still except in `Table.advance`.  The unit is not on the supply's leads at first, the clips are in the air,
and the trimmer stands wherever the last person left it.

What the meter finds
--------------------
* A clip place is a test point.  On d.c. volts it finds the voltage between the point's two nodes, whatever the point
  is meant for; on ohms and diode, what an unpowered unit shows there.  Ohms on a circuit that holds a voltage adds that
  voltage divided by the test current: a number, and a wrong one.
* Across rail capacitors ohms counts up, from the moment when the clips went on.
* Clips in the air read hum and noise on volts, and overload on ohms.
* Reservoirs that have been discharged come back a little (`benchkit.rehearsal.absorption`): a rail that was seen low is
  looked at twice.
* The meter's 10 Mohm loads the circuit: the ratio of loaded to bare voltage is found where the clips are, and found
  again when the operating point there has changed by more than `RATIO_HOLDS`.
"""

from __future__ import annotations

import math
from typing import Final, Protocol

from benchkit.errors import EntryError
from benchkit.rehearsal.absorption import Absorption
from benchkit.rehearsal.meter import Sensed
from benchkit.rehearsal.rails import STRAY_F, Channel, Pair, Rails
from benchkit.rehearsal.supply import Terminals
from benchkit.rehearsal.unit import COARSE_K, FINE_K, HEATING_K, SimulatedUnit
from benchkit.stage.operate import Solved
from benchkit.stage.points import Point, find_point, points_of
from benchkit.stage.topologies import build

LEADS_OHM: Final = 0.02
"""Resistance of the supply's leads when they are shorted together."""
RATIO_HOLDS: Final = 0.05
HUM_V: Final = 0.0003
AIR_V: Final = 0.002
LIVE_V: Final = 0.05
"""Above this voltage on a rail, ohms readings are wrong."""
_METER_TIME_S = 0.3
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
        self._capacitance_f = (rails.reservoir_f or 0.0) + (rails.local_capacitors_f or 0.0)
        bleed_ohm = math.inf if rails.bleed is None else rails.bleed.value
        self._absorbed = tuple(
            Absorption(rails.reservoir_f or 0.0, rails.local_capacitors_f or 0.0, bleed_ohm) for _ in (0, 1)
        )
        self.rails = Rails(max(self._capacitance_f, STRAY_F))
        self.minder: Minder | None = None
        self.sim_s = 0.0
        self.energy_j = 0.0
        self.connected = False
        self.shorted = False
        self.point: Point | None = None
        self.probe_moves = 0
        self._points = {point.name: point for point in points_of(unit.design)}
        self._probe_s = 0.0
        self._channels = _NO_RAILS
        self._ratio: tuple[str, float, float, float] | None = None

    # -- hands ---------------------------------------------------------------------------------------------------

    def probe(self, name: str | None) -> None:
        """Clip the meter to a test point; None takes the clips off.

        Raises
        ------
        EntryError
            When the design has no such point.
        """
        self.point = None if name is None else find_point(self.unit.design, name)
        self.probe_moves += 1
        self._probe_s = self.sim_s

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
        travel = self.unit.turn(turns)
        self._disturb()
        return travel

    def set_travel(self, travel: float) -> float:
        """Put the trimmer at a travel from its least-bias end; return it."""
        self.unit.set_travel(travel)
        self._disturb()
        return self.unit.travel

    # -- the supply's side ---------------------------------------------------------------------------------------

    def program(self, channel: int, volts: float, limit_a: float, on: bool) -> None:
        """Take over what channel 1 or 2 of the supply truly delivers from now on."""
        channels = list(self._channels)
        channels[channel - 1] = Channel(volts, limit_a, on)
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
        return max(volts, 0.0), float(solved.points[f"{name}.current"][0])

    def _disturb(self) -> None:
        self._ratio = None
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
            if self._asleep():
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

    def _asleep(self) -> bool:
        """Whether nothing powers the unit and its rails are empty."""
        return self.rails.settled and max(self.rails.volts) <= 0.0 and not self._powered()

    def _unfed_v(self, rail: int) -> float:
        """The magnitude at a rail that nothing feeds: of its capacitors, and of what they give back (V)."""
        return max(self.rails.volts[rail], self._absorbed[rail].back_v)

    def unfed_v(self) -> Pair:
        """Return the magnitudes at both rails' capacitors (V)."""
        return self._unfed_v(0), self._unfed_v(1)

    def _powered(self) -> bool:
        on = any(channel.on and channel.volts > 0.0 and channel.limit_a > 0.0 for channel in self._channels)
        return on and self.connected and not self.shorted

    def now(self, within_k: float = FINE_K) -> Solved:
        """Return the unit's operating point at this moment."""
        return self.unit.operate(*self._feeding(), within_k=within_k)

    def _feeding(self) -> tuple[Pair, float | None]:
        """What feeds the unit: settings and limit of the supply when settled, else its own capacitors."""
        if not (self._settled() and self._powered()):
            return self.rails.volts, None
        live = [channel.on and channel.volts > 0.0 and channel.limit_a > 0.0 for channel in self._channels]
        volts = [channel.volts if on else 0.0 for channel, on in zip(self._channels, live, strict=True)]
        limit_a = min(channel.limit_a for channel, on in zip(self._channels, live, strict=True) if on)
        return (volts[0], volts[1]), limit_a

    # -- the meter's side ----------------------------------------------------------------------------------------

    @property
    def since_probe_s(self) -> float:
        """Simulated time (s) since the clips were last moved."""
        return self.sim_s - self._probe_s

    def sense(self, function: str, full_scale: float | None) -> Sensed:
        """Return what a function of the meter finds between its clips."""
        point = self.point
        if function == "temperature":
            on_sink = point is not None and point.name == "heatsink"
            return Sensed(self.unit.warmth.temperatures_c()["heatsink"] if on_sink else math.inf)
        nodes = None if point is None else self._nodes(point)
        if point is not None and point.function == "dc current":
            return self._sense_current(point, function)
        if function == "dc current":
            return Sensed(0.0)
        if nodes is None:
            open_end = math.inf if function in ("ohms", "ohms 4-wire", "diode") else 0.0
            return Sensed(open_end, AIR_V if function in ("dc volts", "ac volts") else 0.0)
        assert point is not None
        if function == "ac volts":
            return Sensed(0.0, HUM_V if self._powered() else HUM_V / 30.0)
        if function == "dc volts":
            return Sensed(self._volts(point, nodes))
        return Sensed(self._ohms(point, nodes, function, full_scale))

    def _nodes(self, point: Point) -> tuple[str, str] | None:
        if point.name.endswith(".drop") and point.name.startswith("rail"):
            return None  # nothing stands in the fuses' place on this bench
        if point.name == "rails":
            return "rail+", "rail-"
        return build(self.unit.design).between.get(point.name.removesuffix(".ac"))

    def _sense_current(self, point: Point, function: str) -> Sensed:
        """In series with a rail: its current; a series connection shows no volts and the meter's own ohms."""
        if function != "dc current":
            return Sensed(0.0)
        return Sensed(self.terminals(1 if point.name.startswith("rail+") else 2).amps)

    def _volts(self, point: Point, nodes: tuple[str, str]) -> float:
        bare_v = self._bare_v(nodes)
        if self._asleep() or point.name not in self.now().points:
            return bare_v
        return bare_v * self._loading(point.name, bare_v)

    def _bare_v(self, nodes: tuple[str, str]) -> float:
        """The voltage between two nodes without a meter there."""
        if self._asleep():
            return self._left_v(nodes[0]) - self._left_v(nodes[1])
        return float(self.now().solution.between(*nodes)[0])

    def _left_v(self, node: str) -> float:
        """What a node of a unit without power stands at: a rail at what its reservoir gave back, all else at 0 V."""
        if node == "rail+":
            return self._absorbed[0].back_v
        return -self._absorbed[1].back_v if node == "rail-" else 0.0

    def _loading(self, name: str, bare_v: float) -> float:
        kept = self._ratio
        rail_v = max(self.rails.volts)
        if kept is None or kept[0] != name or not (_near(bare_v, kept[2]) and _near(rail_v, kept[3])):
            kept = self._ratio = name, self.unit.loading(*self._feeding(), name), bare_v, rail_v
        return kept[1]

    def _ohms(self, point: Point, nodes: tuple[str, str], function: str, full_scale: float | None) -> float:
        """Read ohms or the diode range: the unpowered circuit, and whatever voltage it still holds."""
        diode = function == "diode"
        name = self._unpowered_name(point, diode)
        if name is None:
            return math.inf
        value = self.unit.unpowered(name, None if diode else full_scale)
        if diode and not name.startswith("diode."):
            value = value * 0.001 if math.isfinite(value) and value < 1200.0 else math.inf
        if name in ("ohm.rails", "ohm.rail+", "ohm.rail-") and math.isfinite(value) and not diode:
            capacitance_f = self._capacitance_f * (0.5 if name == "ohm.rails" else 1.0)
            if capacitance_f > 0.0:
                value *= -math.expm1(-(self.since_probe_s + _METER_TIME_S) / (value * capacitance_f))
        if max(self.unfed_v()) > LIVE_V or self._powered():
            volts = self._bare_v(nodes)
            value += volts if diode else volts / 0.001
            if diode and abs(value) > 1.2:
                return math.copysign(math.inf, value)
        return value

    def _unpowered_name(self, point: Point, diode: bool) -> str | None:
        """Return the unpowered point at the same place: itself, or the one between the same parts."""
        if not point.powered:
            if diode or not point.name.startswith("diode."):
                return point.name
            return None
        bare = point.name.removesuffix(".ac")
        for candidate in (f"diode.{bare.removesuffix('.vbe')}", f"ohm.{bare}", f"ohm.{_long(bare)}"):
            known = self._points.get(candidate)
            if known is not None and (diode or candidate.startswith("ohm.")):
                return candidate
        return None


def _long(name: str) -> str:
    return name.replace("spread.", "spreader.")


def _near(a: float, b: float) -> bool:
    return abs(a - b) <= RATIO_HOLDS * max(abs(a), abs(b), 1e-12)
