"""For programs: heat, trimmer, and what a bias error costs, beside the expected readings of a condition.

Plain data (numbers, words, lists and mappings of them); a number that is not finite, and an answer that the model
hasn't, is None.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict
from typing import Any

from benchkit.errors import ModelError
from benchkit.stage.bias_cost import bias_report
from benchkit.stage.conditions import Condition
from benchkit.stage.crossover import LOADS_OHM, Sweep
from benchkit.stage.design import Design
from benchkit.stage.expected import finite
from benchkit.stage.trimmer_report import trimmer_report
from benchkit.stage.warming import warm_report

_DIGITS = 7


def more_json(design: Design, condition: Condition, loads_ohm: Sequence[float] = LOADS_OHM) -> dict[str, Any]:
    """Make the objects ``heat``, ``trimmer`` and ``bias``.

    Parameters
    ----------
    design : Design
    condition : Condition
    loads_ohm : sequence of float
        For ``bias``.

    Returns
    -------
    dict
        Each None where the model has no answer at all.
    """
    return {
        "heat": _or_none(_heat, design, condition),
        "trimmer": _or_none(_trimmer, design),
        "bias": _or_none(_bias, design, condition, tuple(loads_ohm)),
    }


def _or_none(make: Any, *given: Any) -> Any:
    try:
        return plain(make(*given))
    except ModelError:
        return None


def plain(value: Any) -> Any:
    """Make data plain: arrays of NumPy and tuples become lists, what is not finite None, floats keep seven digits."""
    if isinstance(value, dict):
        return {key: plain(item) for key, item in value.items()}
    if isinstance(value, (list, tuple)):
        return [plain(item) for item in value]
    if isinstance(value, bool) or not isinstance(value, float):
        return value
    return None if finite(float(value)) is None else float(f"{value:.{_DIGITS}g}")


def _heat(design: Design, condition: Condition) -> dict[str, Any]:
    report = warm_report(design, condition)
    state = report.nominal
    part, hottest_c = state.hottest()
    return {
        "warm_state": report.has_warm_state,
        "share_without": report.share_without,
        "loop_gain": report.gain,
        "worst_loop_gain": report.worst_gain,
        "units": report.units,
        "heatsink_rise_k": float(state.heatsink_rise_k[0]),
        "hottest": part,
        "hottest_c": hottest_c,
        "idle_w": float(state.rails_w[0]),
        "powers_w": {name: float(power[0]) for name, power in state.powers_w.items()},
        "temperatures_c": {name: float(celsius[0]) for name, celsius in state.temperatures_c.items()},
        "margin_used_up_at_rise_k": None if report.headroom is None else report.headroom.rise_k,
    }


def _trimmer(design: Design) -> dict[str, Any]:
    return asdict(trimmer_report(design))


def _bias(design: Design, condition: Condition, loads_ohm: tuple[float, ...]) -> dict[str, Any]:
    report = bias_report(design, condition, loads_ohm)
    return {
        "loads_ohm": report.loads_ohm,
        "regions_a": report.regions_a,
        "junction_c": report.junction_c,
        "target_v": report.target_v,
        "present_v": report.present_v,
        "least_ripple_v": report.least_ripple_v,
        "oliver_v": report.oliver_v,
        "biases": [
            asdict(bias) | {"curve": _curve(report.sweeps[bias.name])} for bias in report.biases
        ],
    }  # fmt: skip


def _curve(sweep: Sweep) -> dict[str, list[float]]:
    return {
        "amps": [float(value) for value in sweep.amps],
        "gain": [float(value) for value in sweep.gain],
        "output_ohm": [float(value) for value in sweep.output_ohm],
    }
