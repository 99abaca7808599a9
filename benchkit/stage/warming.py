"""Does a design come to rest warm, how far is it from running away, and how much heat can it bear on top.

`warm_report` answers for the nominal unit and for a small ensemble, trimmed as the condition says. A unit without a
warm state is one whose temperatures find no balance, or only one that the slightest disturbance leaves for good. A
design is named as one without a warm state when the nominal unit is such a unit, or more than `MOST_WITHOUT` of the
drawn ones are.

Headroom: driving a stage heats its sink from outside its idling. With the sink held at a rise r the idling stage gives
it P(r), and r = theta_sink * (P(r) + more) has a stable solution up to the rise at which theta_sink * dP/dr, everything
else following, is one, or the junctions alone run away. There the margin is used up, and `more` is the heat that the
stage can bear on top of its own.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Final, Literal

import numpy as np

from benchkit.errors import EntryError, ModelError
from benchkit.quantities import show
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design, Rating
from benchkit.stage.draws import Array, draw, nominal, seeds
from benchkit.stage.electrothermal import Electrothermal, WarmState, warm_state
from benchkit.stage.loop_gain import junction_gain, sum_gain
from benchkit.stage.points import transistors_of

DEFAULT_UNITS: Final = 200
MOST_WITHOUT: Final = 1e-3
"""Share of units without a warm state above which a design counts as having none."""
WANTED_GAIN: Final = 0.5
"""A loop gain below this is comfortable: the stage then doubles a disturbance at most (common practice)."""
HOTTEST_SINK_C: Final = 200.0
"""Up to here the rise is looked for at which the margin is used up: beyond, no silicon device lives."""
JUNCTION_C: Final = 150.0
"""Highest junction temperature of a device without a rating (common practice for silicon)."""
BALANCED: Final = 1e-3
"""Relative imbalance of heat below which temperatures count as found."""
_UNITS_BEYOND = 20
"""So many units are drawn at most when the nominal one has no warm state: each of them is dear."""
_RISES = 10
_FINE_RISES = 7

STEADIER: Final = (
    "Mount the spreader's transistor closer to the output devices, enlarge the heat sink or the emitter resistors, or "
    "ask for less bias or lower rails"
)
"""What to do about a stage that runs away."""

Standing = Literal["at rest", "close", "no warm state"]


@dataclass(frozen=True, kw_only=True)
class Headroom:
    """How far the nominal unit is from running away when something else heats its sink as well.

    Attributes
    ----------
    rise_k : float or None
        Rise of the heat sink at which the margin is used up; None when it is not below `HOTTEST_SINK_C`.
    heat_w : float or None
        What the sink can take on top of the stage's own heat until then.
    searched_k : float
        Rise up to which it was looked for.
    """

    rise_k: float | None
    heat_w: float | None
    searched_k: float


@dataclass(frozen=True, kw_only=True)
class WarmReport:
    """Warm states of a design under a condition.

    Attributes
    ----------
    design : Design
    condition : Condition
        As asked, taken as warm.
    nominal : WarmState
        Of one unit.
    headroom : Headroom or None
        None where the nominal unit's circuit has no solution with the sink held.
    units : int
        Drawn ones; 0 when none were asked for.
    without : int
        Drawn units without a warm state.
    gains : array of shape (units,)
        Loop gains of the drawn units; not a number for those without a balance.
    output_w : array of shape (units,)
        Power of each drawn unit's hottest output device.
    seed : int
    """

    design: Design
    condition: Condition
    nominal: WarmState
    headroom: Headroom | None
    units: int
    without: int
    gains: Array
    output_w: Array
    seed: int

    @property
    def share_without(self) -> float:
        """Share of units without a warm state; of the nominal unit alone when no others were drawn."""
        return self.without / self.units if self.units else float(not self.nominal.rests[0])

    @property
    def has_warm_state(self) -> bool:
        """Whether a walk may lead this design there without a person's reason."""
        return bool(self.nominal.rests[0]) and self.share_without <= MOST_WITHOUT

    @property
    def balanced(self) -> bool:
        """Whether the nominal unit's temperatures find a balance at all, stable or not."""
        return bool(np.isfinite(self.nominal.slopes).all() and self.nominal.balance[0] < BALANCED)

    @property
    def gain(self) -> float:
        """Loop gain of the nominal unit; infinite where it finds no balance."""
        gain = float(self.nominal.gain[0])
        return gain if self.balanced else np.inf

    @property
    def worst_gain(self) -> float:
        """Largest loop gain of all units, the nominal one included; infinite where one has no warm state."""
        if self.without:
            return np.inf
        return max(self.gain, float(np.max(self.gains, initial=-np.inf)))

    @property
    def standing(self) -> Standing:
        """Name what the design does when it warms up: "close" when some unit's loop gain is `WANTED_GAIN` or more."""
        if not self.has_warm_state:
            return "no warm state"
        return "close" if self.worst_gain >= WANTED_GAIN else "at rest"

    @property
    def sentence(self) -> str:
        """Say it in a sentence or two, for a screen."""
        where = f"{self.design.name} at {_rails(self.condition)}, trimmer {self.condition.trimmer}"
        if not self.nominal.rests[0]:
            if self.balanced:
                return (
                    f"{where}: the nominal unit has no stable warm state. Its balance there is one that it leaves by "
                    "itself, running up or falling back."
                )
            return f"{where}: the nominal unit has no warm state. It heats itself until something breaks."
        if not self.has_warm_state:
            return (
                f"{where}: {self.without} of {self.units} units have no warm state. They heat themselves until "
                "something breaks."
            )
        told = f"loop gain {self.gain:.2f}"
        if self.units:
            told += f", {self.worst_gain:.2f} in the worst of {self.units} units"
        if self.standing == "close":
            return f"{where}: it comes to rest, but close to running away ({told}; below {WANTED_GAIN:g} is wanted)."
        return f"{where}: it comes to rest ({told}; at 1 it would run away)."

    @property
    def next_step(self) -> str:
        """Say what to do about it; empty when nothing needs doing."""
        return "" if self.standing == "at rest" else STEADIER

    def error(self) -> ModelError:
        """Make the error of a design without a warm state, for whoever can't go on without one."""
        return ModelError(self.sentence, f"a warm state in all but {MOST_WITHOUT:.1%} of units", self.next_step)


@lru_cache(maxsize=64)
def warm_report(design: Design, condition: Condition, units: int = DEFAULT_UNITS, seed: int = 0) -> WarmReport:
    """Report on the warm state of a design; cached.

    Parameters
    ----------
    design : Design
    condition : Condition
        Rails, limit, trimmer and ambient temperature count; it is taken as warm.
    units : int
        Units to draw besides the nominal one; 0 for none.
    seed : int

    Returns
    -------
    WarmReport
        Of every design: that there is no warm state is an answer.

    Raises
    ------
    EntryError
        For a number of units below zero.
    """
    if units < 0:
        raise EntryError(f"units: {units} came", "0 or more units")
    unit = warm_state(design, nominal(design), condition)
    gains, output_w, without = np.zeros(0), np.zeros(0), 0
    if not unit.rests[0]:
        units = min(units, _UNITS_BEYOND)
    if units:
        parameters = draw(design, units, seeds("limits", seed))
        drawn = warm_state(design, parameters, condition, start=unit.solved)
        gains, without = drawn.gain, int(np.count_nonzero(~drawn.rests))
        output_w = np.max([drawn.powers_w[part] for part in output_parts(design)], axis=0)
    return WarmReport(
        design=design, condition=condition, nominal=unit, headroom=headroom(design, condition, unit), units=units,
        without=without, gains=gains, output_w=output_w, seed=seed,
    )  # fmt: skip


def headroom(design: Design, condition: Condition, unit: WarmState) -> Headroom | None:
    """Find the rise at which the nominal unit's margin is used up, its trimmer where a warm state has it."""
    ambient_c = design.thermal.ambient_c if condition.ambient_c is None else condition.ambient_c
    searched_k = max(HOTTEST_SINK_C - ambient_c, 1.0)
    rises = np.linspace(0.0, searched_k, _RISES)
    gain, power_w = _held(design, condition, unit, rises)
    if not np.isfinite(gain[0]):
        return None
    # Beyond the first rise without a balance the junctions run away by themselves.
    used_up = ~(gain < 1.0)
    if not used_up.any():
        return Headroom(rise_k=None, heat_w=None, searched_k=searched_k)
    first = int(np.argmax(used_up))
    if first:
        rises = np.linspace(rises[first - 1], rises[first], _FINE_RISES)
        gain, power_w = _held(design, condition, unit, rises)
        first = max(int(np.argmax(~(gain < 1.0))), 1)
        low, high = gain[first - 1], gain[first]
        share = (1.0 - low) / (high - low) if np.isfinite(high) else 0.0
        rise_k = float(rises[first - 1] + share * (rises[first] - rises[first - 1]))
        own_w = (
            float(power_w[first - 1] + share * (power_w[first] - power_w[first - 1])) if share else power_w[first - 1]
        )
    else:
        rise_k, own_w = 0.0, float(power_w[0])
    theta = design.thermal.heatsink_k_per_w
    heat_w = rise_k / theta - float(own_w) if theta > 0.0 else np.inf
    return Headroom(rise_k=rise_k, heat_w=heat_w, searched_k=searched_k)


def _held(design: Design, condition: Condition, unit: WarmState, rises_k: Array) -> tuple[Array, Array]:
    """Gain and power on the sink (W) with the sink held at rises; the gain is not a number without a balance."""
    travel = None if unit.travel is None else np.asarray(unit.travel[0])
    stage = Electrothermal(design, nominal(design), condition, travel, units=len(rises_k))
    usable = bool(np.isfinite(unit.slopes).all() and unit.balance[0] < BALANCED)
    _, point = stage.held(rises_k, unit if usable else None)
    slopes = stage.slopes(point).powers
    inner = junction_gain(stage.nodes, slopes)
    with np.errstate(invalid="ignore"):
        gain = np.where(inner < 1.0, sum_gain(stage.nodes, slopes), np.nan)
    return gain, point.powers_w[stage.nodes.on_sink].sum(axis=0)


def output_parts(design: Design) -> tuple[str, ...]:
    """Names of the output devices."""
    return tuple(part.name for part in transistors_of(design) if part.role == "output")


def rating_of(design: Design, part: str, role: str) -> Rating | None:
    """Find a part's rating: its own, its side's ("output.upper"), or its role's."""
    return design.ratings.get(part) or design.ratings.get(".".join(part.split(".")[:2])) or design.ratings.get(role)


def hottest_allowed_c(design: Design, part: str, role: str) -> float:
    """Highest junction temperature (degC) that a part is rated for, or what is usual for silicon."""
    rating = rating_of(design, part, role)
    return JUNCTION_C if rating is None or rating.junction_c is None else rating.junction_c


def too_hot(design: Design, state: WarmState, unit: int = 0) -> tuple[tuple[str, float, float], ...]:
    """Junctions of a unit that are hotter than allowed: part, temperature and what is allowed (degC)."""
    found = []
    for part in transistors_of(design):
        celsius = float(state.temperatures_c[part.name][unit])
        allowed_c = hottest_allowed_c(design, part.name, part.role)
        if celsius > allowed_c:
            found.append((part.name, celsius, allowed_c))
    return tuple(found)


def _rails(condition: Condition) -> str:
    if condition.negative_v == 0.0:
        return show(condition.positive_v, "V")
    return f"{show(condition.positive_v, 'V')} and {show(condition.negative_v, 'V')}"
