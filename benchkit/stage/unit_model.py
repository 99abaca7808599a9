"""All readings of one unit in one model: several conditions, one set of unknown values.

A *layout* says what was read: conditions (or pairs of conditions between which readings were taken), each with its
points. `UnitModel` lays the readings of all of them side by side and answers for any hypothesis what they would be at z
and how they move with z, so that a resistor measured cold bears on a drop measured under power.

Coordinates beside those of parts and bench (`benchkit.stage.latent`):

* where the trimmer stands, when it stands at the target: a healthy unit's travel there, widened, because a faulty unit
  may have been brought to the target by another travel. An unknown position is a coordinate of the unit itself: it is
  the same under every condition that calls it unknown.
* the place between two conditions. A stage drifts while it is read: each reading is allowed `DRIFT_SHARE` of the way.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from benchkit.circuit.solution import Solution
from benchkit.circuit.solve import Effort
from benchkit.stage.conditions import Condition, TrimmerPosition, Unpowered
from benchkit.stage.design import Design
from benchkit.stage.draws import Array
from benchkit.stage.faults import Fault
from benchkit.stage.latent import Coordinates
from benchkit.stage.observations import Conditions
from benchkit.stage.readouts import Index, Linear, Mask, Matrix, Powered
from benchkit.stage.topologies import Variant, build
from benchkit.stage.unpowered_readouts import STRAIGHT, UnpoweredPoints

Layout = tuple[tuple[Conditions, tuple[str, ...]], ...]
POSITION = "spreader.trimmer.position"
DRIFT_SHARE = 0.15
"""How far a reading may stand off the common place between two conditions (standard deviation, share of the way)."""


@dataclass
class Joint:
    """Readings of units under all conditions, side by side.

    Attributes
    ----------
    f : array of shape (units, readings)
    slope : array of shape (units, readings, coordinates)
    doubt : array of shape (units, readings)
        Standard deviation of a reading that was taken while the stage was on its way between two conditions.
    good : array of bool of shape (units,)
    straight_at : array of shape (coordinates, units)
        Where the slopes of unpowered readings were worked out.
    solutions : tuple of Solution
        One a solved condition.
    """

    f: Matrix
    slope: Matrix
    doubt: Matrix
    good: Mask
    straight_at: Array
    solutions: tuple[Solution, ...]

    def take(self, index: Index) -> Joint:
        """Return some of the units."""
        units = len(self.good)
        taken = []
        for solution in self.solutions:
            repeats = solution.units // units
            taken.append(solution.take(np.concatenate([index + k * units for k in range(repeats)])))
        return Joint(
            self.f[index], self.slope[index], self.doubt[index], self.good[index], self.straight_at[:, index],
            tuple(taken),
        )  # fmt: skip


@dataclass(frozen=True)
class _Block:
    """Readings under the same conditions: one readout, or two and the place between them."""

    readouts: tuple[Powered | UnpoweredPoints, ...]
    place: str


class UnitModel:
    """Hypotheses about one design's units, for one layout of readings.

    Attributes
    ----------
    coordinates : Coordinates
    readings : tuple of (Conditions, str)
        What each column of the readings is.
    stated : bool
        Whether every condition states where the trimmer stands.
    warm : bool
        Whether a condition is a warm one.
    most : array of shape (readings,)
        Readings above these show as an overload; infinite where there is no such end.
    """

    def __init__(self, design: Design, layout: Layout) -> None:
        self.design = design
        self.layout = layout
        self.readings = tuple((own(conditions, point), point) for conditions, points in layout for point in points)
        extra: list[str] = []
        plan = []
        for number, (conditions, _) in enumerate(layout):
            travel = _travel_of(conditions, number)
            if travel and travel != POSITION:
                extra.append(travel)
            ends = _ends(conditions)
            place = f"place {number}" if len(ends) > 1 else ""
            if place:
                extra.append(place)
            # each powered condition has its own setting errors: a supply that is set anew, or a rail held at a reading
            rails = (f"rail+ {number}", f"rail- {number}") if isinstance(ends[0], Condition) else ("", "")
            extra += [rail for rail in rails if rail]
            plan.append((ends, travel, place, rails))
        self.warm = any(isinstance(one, Condition) and one.when == "warm" for ends, *_ in plan for one in ends)
        self.stated = not any(travel for _, travel, _, _ in plan)
        self.coordinates = Coordinates(design, tuple(extra))
        self._blocks = []
        most = []
        for (ends, travel, place, rails), (_, points) in zip(plan, layout, strict=True):
            readouts: list[Powered | UnpoweredPoints] = []
            for end in ends:
                if isinstance(end, Condition):
                    readouts.append(Powered(design, self.coordinates, end, points, travel, rails))
                else:
                    trimmer: TrimmerPosition = "unknown" if end.trimmer == "target" else end.trimmer
                    readouts.append(UnpoweredPoints(design, self.coordinates, trimmer, end.ambient_c, points, travel))
            self._blocks.append(_Block(tuple(readouts), place))
            first = readouts[0]
            most.append(first.most if isinstance(first, UnpoweredPoints) else np.full(len(points), np.inf))
        self.most = np.concatenate(most)

    def at(
        self,
        z: Array,
        faults: Sequence[Fault],
        start: Joint | None = None,
        effort: Effort = "borrow",
        rails_v: Matrix | None = None,
        kin: Index | None = None,
    ) -> Joint:
        """Readings of units at z, of shape (coordinates, units), each with its fault.

        Parameters
        ----------
        start : Joint, optional
            Earlier readings of the same units, to start from.
        effort : "start", "borrow" or "full"
            What the solver does for units that are hard.
        rails_v : array of shape (units, entries of the layout, 2), optional
            Positive and negative rail of each unit (V) under conditions that hold them; not a number elsewhere. Entries
            that were added to a layout may be missing.
        kin : array of int of shape (units,), optional
            Groups within which units may start from each other's solutions; without, all are one.
        """
        f, slopes, doubts, solutions = [], [], [], []
        good = np.ones(z.shape[1], np.bool_)
        column = 0
        kept = iter(() if start is None else start.solutions)
        for number, block in enumerate(self._blocks):
            held_v = None if rails_v is None or number >= rails_v.shape[1] else rails_v[:, number]
            ends: list[Linear] = []
            for readout in block.readouts:
                before = next(kept, None)
                if isinstance(readout, UnpoweredPoints) and start is not None:
                    known = start.slope[:, column : column + len(readout.points)]
                    ends.append(readout.near(z, faults, before, effort, known, start.straight_at, kin))
                elif isinstance(readout, UnpoweredPoints):
                    ends.append(readout.at(z, faults, before, effort, kin))
                else:
                    ends.append(readout.at(z, faults, before, effort, held_v, kin))
                solutions.append(ends[-1].solution)
                good &= ends[-1].good
            column += len(block.readouts[0].points)
            if len(ends) == 1:
                f.append(ends[0].f)
                slopes.append(ends[0].slope)
                doubts.append(np.zeros_like(ends[0].f))
                continue
            first, last = ends
            share, by_z = self.coordinates.place_and_slope(z, block.place)
            f.append(first.f + share[:, None] * (last.f - first.f))
            slope = first.slope + share[:, None, None] * (last.slope - first.slope)
            slope[:, :, self.coordinates.index[block.place]] += (last.f - first.f) * by_z[:, None]
            slopes.append(slope)
            doubts.append(DRIFT_SHARE * np.abs(last.f - first.f))
        straight_at = z.copy()
        if start is not None:
            near = (np.abs(z - start.straight_at) <= STRAIGHT).all(axis=0)
            straight_at[:, near] = start.straight_at[:, near]
        return Joint(
            np.concatenate(f, axis=1), np.concatenate(slopes, axis=1), np.concatenate(doubts, axis=1), good,
            straight_at, tuple(solutions),
        )  # fmt: skip


def answers(design: Design, condition: Condition | Unpowered, point: str) -> bool:
    """Whether the model has an answer for a point under a condition (a fuse's drop needs a resistor in its place)."""
    if isinstance(condition, Unpowered):
        return True
    stage = build(design, Variant(fuses=condition.fuse_ohm is not None))
    return point == "heatsink" or point in stage.currents or point in stage.between


def own(conditions: Conditions, point: str) -> Conditions:
    """The conditions of one point's reading: unpowered points that share a circuit each name themselves."""
    first = conditions[0]
    if not isinstance(first, Unpowered):
        return conditions
    return (Unpowered(point=point, trimmer=first.trimmer, ambient_c=first.ambient_c),)


def layout_of(readings: Sequence[tuple[Conditions, str]]) -> Layout:
    """Put readings into a layout: conditions in first order; unpowered points of one trimmer position together."""
    groups: dict[object, tuple[Conditions, list[str]]] = {}
    for conditions, point in readings:
        first = conditions[0]
        key: object = conditions
        if isinstance(first, Unpowered):
            key = (first.trimmer, first.ambient_c)
        points = groups.setdefault(key, (conditions, []))[1]
        if point not in points:
            points.append(point)
    return tuple((conditions, tuple(points)) for conditions, points in groups.values())


def _ends(conditions: Conditions) -> Conditions:
    """First and last condition, as far as they differ in more than where a target lies within its tolerance."""
    first, last = conditions[0], conditions[-1]
    if isinstance(first, Condition) and isinstance(last, Condition):
        if first == last:
            return (first,)
        if first.trimmer == last.trimmer == "target" and first.when == last.when:
            return (conditions[len(conditions) // 2],)
        return (first, last)
    return (first,)


def _travel_of(conditions: Conditions, number: int) -> str:
    trimmer = conditions[0].trimmer
    if isinstance(conditions[0], Unpowered) and trimmer == "target":
        return POSITION
    if trimmer == "unknown":
        return POSITION
    return f"travel {number}" if trimmer == "target" else ""
