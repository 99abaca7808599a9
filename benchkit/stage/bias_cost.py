"""What a bias error costs a design under a condition: half and twice the target, the present bias, the best one.

The figures come from `benchkit.stage.crossover`; here they are put beside each other.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

from benchkit.errors import ModelError
from benchkit.stage.conditions import Condition
from benchkit.stage.crossover import (
    LOADS_OHM,
    Setting,
    Sweep,
    junction_c,
    least_ripple_drop_v,
    oliver_drop_v,
    region,
    sweeps,
)
from benchkit.stage.design import Design, target_drop_v
from benchkit.stage.draws import nominal
from benchkit.stage.operate import solve_units
from benchkit.stage.points import transistors_of

_LEAST_SHARE: Final = 1e-3
_SAME: Final = 0.01


@dataclass(frozen=True, kw_only=True)
class Bias:
    """What one bias costs and gives.

    Attributes
    ----------
    name : str
        "half", "target", "double"; "present" and "least ripple" where they differ from the target.
    drop_v, current_a : float
        Emitter drop, and quiescent current of all pairs.
    idle_w : float
        What that current turns into heat between the rails.
    gain, output_ohm : float
        At rest, into the first load.
    ripples : tuple of float
        Gain ripple into each load.
    """

    name: str
    drop_v: float
    current_a: float
    idle_w: float
    gain: float
    output_ohm: float
    ripples: tuple[float, ...]


@dataclass(frozen=True, kw_only=True, eq=False)
class BiasReport:
    """What a bias error costs a design under a condition; see the top of this module.

    Attributes
    ----------
    loads_ohm, regions_a : tuple of float
        Loads, and how far the output current goes either way for each.
    junction_c : float
        Temperature of the output junctions.
    target_v, present_v, least_ripple_v : float
        Emitter drops: the target, what the nominal unit has, and where by the model the gain into the first load
        ripples least.
    oliver_v : float or None
        By Oliver's condition with the devices' own resistances; None for a feedback pair.
    biases : tuple of Bias
        From the least to the greatest drop.
    sweeps : dict of str to Sweep
        Into the first load, by the name of the bias.
    """

    loads_ohm: tuple[float, ...]
    regions_a: tuple[float, ...]
    junction_c: float
    target_v: float
    present_v: float
    least_ripple_v: float
    oliver_v: float | None
    biases: tuple[Bias, ...]
    sweeps: dict[str, Sweep]

    def __getitem__(self, name: str) -> Bias:
        return next(bias for bias in self.biases if bias.name == name)


def bias_report(design: Design, condition: Condition, loads_ohm: Sequence[float] = LOADS_OHM) -> BiasReport:
    """Say what a bias error costs a design.

    Parameters
    ----------
    design : Design
    condition : Condition
        Gives the present bias and how warm the junctions are, both of the nominal unit. The rails are always the
        design's full ones: on lower ones the output current hardly leaves what both halves conduct at rest.
    loads_ohm : sequence of float

    Raises
    ------
    ModelError
        When the nominal unit has no operating point under the condition, or the stage none at some output current.
    """
    unit = solve_units(design, nominal(design), condition, loading="none")
    if not unit.converged[0]:
        raise ModelError(f"{design.name}: the nominal unit found no state of rest", "one, for its bias to be looked at")
    setting = Setting(
        positive_v=design.rails.positive_v,
        negative_v=design.rails.negative_v,
        temperatures_c=tuple(float(unit.temperatures_c[part.name][0]) for part in transistors_of(design)),
    )
    target_v, present_v = target_drop_v(design), float(unit.points["emitter.pair.1"][0]) / 2.0
    loads = tuple(loads_ohm)
    best_v = least_ripple_drop_v(design, setting, loads[0])
    drops = {"half": 0.5 * target_v, "target": target_v, "double": 2.0 * target_v}
    if abs(best_v / target_v - 1.0) > _SAME:
        drops["least ripple"] = best_v
    if present_v > _LEAST_SHARE * target_v and abs(present_v / target_v - 1.0) > _SAME:
        drops["present"] = present_v
    names = sorted(drops, key=lambda name: drops[name])
    found = [sweeps(design, tuple(drops[name] for name in names), load, setting) for load in loads]
    biases = []
    for index, name in enumerate(names):
        first = found[0][index]
        gain, output_ohm = first.at_rest
        biases.append(
            Bias(
                name=name, drop_v=first.drop_v, current_a=first.current_a,
                idle_w=(setting.positive_v - setting.negative_v) * first.current_a,
                gain=gain, output_ohm=output_ohm, ripples=tuple(each[index].ripple for each in found),
            )
        )  # fmt: skip
    celsius = junction_c(design, setting)
    followers = design.output.topology != "complementary-feedback-pair"
    return BiasReport(
        loads_ohm=loads,
        regions_a=tuple(region(design, load, setting) for load in loads),
        junction_c=celsius,
        target_v=target_v,
        present_v=present_v,
        least_ripple_v=best_v,
        oliver_v=oliver_drop_v(design, celsius) if followers else None,
        biases=tuple(biases),
        sweeps=dict(zip(names, found[0], strict=True)),
    )
