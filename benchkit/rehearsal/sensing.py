"""What the meter finds between its clips: a test point, a part of an unpowered unit, or the air.

`benchkit.rehearsal.wiring` says what it finds; this is how.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Final

from benchkit.rehearsal.meter import Sensed
from benchkit.rehearsal.unit import COARSE_K, rails_of
from benchkit.stage.points import Point, points_of
from benchkit.stage.topologies import build

if TYPE_CHECKING:
    from benchkit.rehearsal.wiring import Table

RATIO_HOLDS: Final = 0.05
HUM_NOISE: Final = 0.05
"""How unsteady a reading of hum is, as a share of it."""
AIR_V: Final = 0.002
LIVE_V: Final = 0.05
"""Above this voltage on a rail, ohms readings are wrong."""
_METER_TIME_S = 0.3


class Senses:
    """The meter's clips on a bench table.

    Parameters
    ----------
    table : Table

    Attributes
    ----------
    point : Point or None
        Where they were put; None in the air.
    """

    def __init__(self, table: Table) -> None:
        self.point: Point | None = None
        self._table = table
        self._moves = 0
        self._put_s = 0.0
        self._slipped_until_s: float | None = None
        self._points = {point.name: point for point in points_of(table.unit.design)}
        self._ratio: tuple[str, float, float, float] | None = None

    def put(self, point: Point | None) -> None:
        """Clip on to a test point; None takes the clips off."""
        self.point = point
        self._slipped_until_s = None
        self._moves += 1
        self._put_s = self._table.sim_s

    def slip(self, seconds: float) -> None:
        """Let the clips slip off their point for some seconds."""
        self._slipped_until_s = self._table.sim_s + seconds

    def forget(self) -> None:
        """Find out anew what the meter takes away: something has changed."""
        self._ratio = None

    @property
    def moves(self) -> int:
        """How often the clips have been moved, a slip's way back included."""
        self._settle_slip()
        return self._moves

    @property
    def since_s(self) -> float:
        """Simulated time (s) since the clips were last moved."""
        self._settle_slip()
        return self._table.sim_s - self._put_s

    def sense(self, function: str, full_scale: float | None) -> Sensed:
        """Return what a function of the meter finds between its clips."""
        point = None if self._slips() else self.point
        if function == "temperature":
            on_sink = point is not None and point.name == "heatsink"
            return Sensed(self._table.unit.warmth.temperatures_c()["heatsink"] if on_sink else math.inf)
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
            return self._ac(point)
        if function == "dc volts":
            return Sensed(self._volts(point, nodes) + self._driven_drop_v(point))
        return Sensed(self._ohms(point, nodes, function, full_scale))

    def _slips(self) -> bool:
        """Whether the clips are off their point just now."""
        self._settle_slip()
        return self._slipped_until_s is not None

    def _settle_slip(self) -> None:
        if self._slipped_until_s is not None and self._table.sim_s >= self._slipped_until_s:
            self._put_s, self._slipped_until_s = self._slipped_until_s, None
            self._moves += 1

    def _ac(self, point: Point) -> Sensed:
        hum_v = self._table.unit.hum_v * (1.0 if self._table.powered() else 1.0 / 30.0)
        if point.name not in ("output", "output.ac") or self._table.asleep():
            return Sensed(hum_v, HUM_NOISE * hum_v)
        value_v = math.hypot(hum_v, self._table.unit.beyond.stray_v(rails_of(self._table.now(COARSE_K))))
        return Sensed(value_v, HUM_NOISE * hum_v)

    def _driven_drop_v(self, point: Point) -> float:
        """What a sine's mean current adds to an emitter drop."""
        if not self._table.unit.beyond.drives or self._table.asleep() or not point.name.startswith("emitter."):
            return 0.0
        pair = point.name.rpartition(".")[2]
        names = [f"emitter.upper.{pair}", f"emitter.lower.{pair}"] if ".pair." in point.name else [point.name]
        volts = rails_of(self._table.now(COARSE_K))
        return sum(
            self._table.unit.beyond.drop_v(volts, float(self._table.unit.parameters[name].item())) for name in names
        )

    def _nodes(self, point: Point) -> tuple[str, str] | None:
        if point.name.endswith(".drop") and point.name.startswith("rail"):
            return None  # nothing stands in the fuses' place on this bench
        if point.name == "rails":
            return "rail+", "rail-"
        return build(self._table.unit.design).between.get(point.name.removesuffix(".ac"))

    def _sense_current(self, point: Point, function: str) -> Sensed:
        """In series with a rail: its current; a series connection shows no volts and the meter's own ohms."""
        if function != "dc current":
            return Sensed(0.0)
        return Sensed(self._table.terminals(1 if point.name.startswith("rail+") else 2).amps)

    def _volts(self, point: Point, nodes: tuple[str, str]) -> float:
        bare_v = self._bare_v(nodes)
        if self._table.asleep() or point.name not in self._table.now().points:
            return bare_v
        return bare_v * self._loading(point.name, bare_v)

    def _bare_v(self, nodes: tuple[str, str]) -> float:
        """The voltage between two nodes without a meter there."""
        if self._table.asleep():
            return self._left_v(nodes[0]) - self._left_v(nodes[1])
        return float(self._table.now().solution.between(*nodes)[0])

    def _left_v(self, node: str) -> float:
        """What a node of a unit without power stands at: a rail at what its reservoir gave back, all else at 0 V."""
        if node == "rail+":
            return self._table.given_back_v(0)
        return -self._table.given_back_v(1) if node == "rail-" else 0.0

    def _loading(self, name: str, bare_v: float) -> float:
        kept = self._ratio
        rail_v = max(self._table.rails.volts)
        if kept is None or kept[0] != name or not (_near(bare_v, kept[2]) and _near(rail_v, kept[3])):
            kept = self._ratio = name, self._table.unit.loading(*self._table.feeding(), name), bare_v, rail_v
        return kept[1]

    def _ohms(self, point: Point, nodes: tuple[str, str], function: str, full_scale: float | None) -> float:
        """Read ohms or the diode range: the unpowered circuit, and whatever voltage it still holds."""
        diode = function == "diode"
        name = self._unpowered_name(point, diode)
        if name is None:
            return math.inf
        value = self._table.unit.unpowered(name, None if diode else full_scale)
        if diode and not name.startswith("diode."):
            value = value * 0.001 if math.isfinite(value) and value < 1200.0 else math.inf
        if name in ("ohm.rails", "ohm.rail+", "ohm.rail-") and math.isfinite(value) and not diode:
            capacitance_f = self._table.capacitance_f * (0.5 if name == "ohm.rails" else 1.0)
            if capacitance_f > 0.0:
                value *= -math.expm1(-(self.since_s + _METER_TIME_S) / (value * capacitance_f))
        if max(self._table.unfed_v()) > LIVE_V or self._table.powered():
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
