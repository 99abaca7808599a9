"""Circuits and values that several tests use.

The device parameters are invented: of the size that small-signal, driver and power transistors have, no real type's.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.netlist import Netlist, Transistor
from benchkit.circuit.solve import compile_netlist

Array = NDArray[np.float64]
Values = dict[str, Any]

SMALL = {
    "IS": 2e-14, "BF": 150, "IKF": 0.5, "VAF": 100, "ISE": 1e-14, "NE": 1.5, "BR": 4, "RB": 10, "RE": 0.1, "RC": 0.5,
    "XTB": 1.5, "ISC": 1e-13, "NC": 1.8, "IKR": 0.2, "VAR": 20,
}  # fmt: skip
DRIVER = {
    "IS": 5e-14, "BF": 120, "IKF": 1.0, "VAF": 120, "ISE": 2e-14, "NE": 1.6, "BR": 5, "RB": 5, "RE": 0.05, "RC": 0.2,
    "XTB": 1.5,
}  # fmt: skip
POWER = {
    "IS": 4e-12, "BF": 80, "IKF": 6.0, "VAF": 80, "ISE": 1e-11, "NE": 1.8, "BR": 5, "RB": 1.5, "RE": 0.02, "RC": 0.05,
    "XTB": 1.5,
}  # fmt: skip


def follower(double: bool, feeds: str, faulty: bool = False) -> Netlist:
    """Build a complementary emitter follower with its spreader.

    Parameters
    ----------
    double : bool
        Drivers before the output devices.
    feeds : {"resistors", "sources"}
        What sends current through the spreader: two resistors, or a source and a servo.
    faulty : bool
        Put resistors across the transistors' terminals, and from the upper collector to the output.
    """
    n = Netlist()
    n.supply("rail+", "v+", "0")
    n.supply("rail-", "0", "v-")
    if feeds == "resistors":
        n.resistor("feed.upper", "v+", "top")
        n.resistor("feed.lower", "bottom", "v-")
    else:
        n.source("feed.upper", "v+", "top")
        n.servo("feed.lower", "bottom", "v-", sense="output")
    n.resistor("spreader.upper", "top", "wiper")
    n.resistor("spreader.lower", "wiper", "end")
    n.resistor("trimmer", "end", "bottom")
    n.transistor("spreader", "top", "wiper", "bottom")
    first, second = "top", "bottom"
    if double:
        n.transistor("driver.upper", "v+", "top", "first")
        n.transistor("driver.lower", "v-", "bottom", "second")
        n.resistor("driver.resistor", "first", "second")
        first, second = "first", "second"
    n.resistor("stopper.upper", first, "base.upper")
    n.resistor("stopper.lower", second, "base.lower")
    n.transistor("output.upper", "v+", "base.upper", "emitter.upper")
    n.transistor("output.lower", "v-", "base.lower", "emitter.lower")
    n.resistor("re.upper", "emitter.upper", "output")
    n.resistor("re.lower", "output", "emitter.lower")
    n.resistor("load", "output", "0")
    if faulty:
        for t in [e for e in n.elements.values() if isinstance(e, Transistor)]:
            n.resistor(f"{t.name}.ce", t.collector, t.emitter)
            n.resistor(f"{t.name}.be", t.base, t.emitter)
            n.resistor(f"{t.name}.bc", t.base, t.collector)
        n.resistor("heatsink", "v+", "output")
    return n


def transistors(netlist: Netlist) -> list[str]:
    return [e.name for e in netlist.elements.values() if isinstance(e, Transistor)]


def values_of(
    netlist: Netlist, rails_v: float = 35.0, limit_a: float = 0.5, celsius: float = 25.0, trimmer: float = 250.0
) -> Values:
    """Values of one good unit."""
    values: Values = {
        "rail+.volts": rails_v, "rail-.volts": rails_v, "rail+.limit_a": limit_a, "rail-.limit_a": limit_a,
        "feed.upper": rails_v / 8e-3, "feed.lower": rails_v / 8e-3,
        "feed.upper.amps": 8e-3, "feed.lower.rest_v": 0.0, "feed.lower.max_a": 30e-3,
        "spreader.upper": 2200.0, "spreader.lower": 680.0, "trimmer": trimmer, "driver.resistor": 220.0,
        "stopper.upper": 4.7, "stopper.lower": 4.7, "re.upper": 0.22, "re.lower": 0.22, "load": 1e7,
    }  # fmt: skip
    keys = compile_netlist(netlist).keys
    if "driver.resistor" not in keys:
        values["spreader.upper"] = 680.0
    values = {k: v for k, v in values.items() if k in keys}
    for name in transistors(netlist):
        kind = SMALL if name == "spreader" else DRIVER if name.startswith("driver") else POWER
        values.update({f"{name}.{key}": float(number) for key, number in kind.items()})
        values[f"{name}.polarity"] = -1.0 if name.endswith("lower") else 1.0
        values[f"{name}.kelvin"] = celsius + 273.15
    for name in keys:
        if name.endswith((".ce", ".be", ".bc")) or name == "heatsink":
            values[name] = 1e12
    return values


def spread(values: Values, units: int, seed: int) -> dict[str, Array]:
    """Give every unit its own resistors (2 %), saturation currents and current gains."""
    rng = np.random.default_rng(seed)
    result = {key: np.full(units, float(value)) for key, value in values.items()}
    for key in result:
        if key.endswith(".IS"):
            result[key] *= np.exp(rng.normal(0.0, 0.1, units))
        elif key.endswith(".BF"):
            result[key] *= np.exp(rng.normal(0.0, 0.2, units))
        elif "." not in key or key.split(".")[0] in ("re", "stopper") or key in ("spreader.upper", "spreader.lower"):
            result[key] *= rng.uniform(0.98, 1.02, units)
    return result


def faults(netlist: Netlist) -> dict[str, Callable[[dict[str, Array]], None]]:
    """List hard faults as changes of values, by name."""
    result: dict[str, Callable[[dict[str, Array]], None]] = {}

    def put(name: str, keys: list[str], value: float) -> None:
        def change(v: dict[str, Array]) -> None:
            for key in keys:
                v[key][:] = value

        result[name] = change

    def scale(name: str, key: str, factor: float) -> None:
        def change(v: dict[str, Array]) -> None:
            v[key] *= factor

        result[name] = change

    for key in ("spreader.upper", "spreader.lower", "trimmer", "driver.resistor", "stopper.upper", "stopper.lower",
                "re.upper", "re.lower"):  # fmt: skip
        if key in netlist.elements:
            put(f"{key} short", [key], 0.05)
            scale(f"{key} open", key, 1e8)
            scale(f"{key} ten times high", key, 10.0)
            scale(f"{key} ten times low", key, 0.1)
    for t in transistors(netlist):
        put(f"{t} open base", [f"{t}.RB"], 1e9)
        put(f"{t} open collector", [f"{t}.RC"], 1e9)
        put(f"{t} open emitter", [f"{t}.RE"], 1e9)
        put(f"{t} missing", [f"{t}.RB", f"{t}.RC", f"{t}.RE"], 1e9)
        scale(f"{t} wrong polarity", f"{t}.polarity", -1.0)
        scale(f"{t} leaky", f"{t}.IS", 1e5)
        for ends in ("ce", "be", "bc"):
            put(f"{t} {ends} short", [f"{t}.{ends}"], 0.05)

        def reverse(v: dict[str, Array], t: str = t) -> None:
            for one, other in (
                ("BF", "BR"),
                ("VAF", "VAR"),
                ("IKF", "IKR"),
                ("ISE", "ISC"),
                ("NE", "NC"),
                ("RE", "RC"),
            ):
                a, b = v.get(f"{t}.{one}"), v.get(f"{t}.{other}")
                if a is not None and b is not None:
                    v[f"{t}.{one}"], v[f"{t}.{other}"] = b, a

        result[f"{t} reversed"] = reverse
    put("collector to heatsink", ["heatsink"], 0.05)
    if "feed.lower.max_a" in values_of(netlist):
        put("feed dead", ["feed.upper.amps"], 1e-9)
        put("feed stuck high", ["feed.upper.amps"], 0.1)
        put("servo dead", ["feed.lower.max_a"], 1e-9)
        put("servo stuck high", ["feed.lower.rest_v"], -1e3)
        put("servo stuck low", ["feed.lower.rest_v"], 1e3)
    return result


def one_fault_each(netlist: Netlist, units: int, seed: int) -> tuple[dict[str, Array], list[str]]:
    """Values of units that each have one random fault, random rails, current limit, temperature and trimmer."""
    rng = np.random.default_rng(seed)
    values = spread(values_of(netlist), units, seed)
    # every key that a fault sets needs a value of its own in every unit
    for name in transistors(netlist):
        defaults = {"RB": 0.0, "RC": 0.0, "RE": 0.0, "VAR": np.inf, "IKR": np.inf, "ISC": 0.0, "NC": 2.0}
        for key, default in defaults.items():
            values.setdefault(f"{name}.{key}", np.full(units, default))
        values[f"{name}.kelvin"] = rng.uniform(288.15, 348.15, units)
    values["rail+.volts"] = rng.choice([5.0, 15.0, 35.0], units)
    values["rail-.volts"] = values["rail+.volts"].copy()
    values["rail+.limit_a"] = rng.choice([0.05, 0.1, 0.5, 3.0], units)
    values["rail-.limit_a"] = values["rail+.limit_a"].copy()
    values["trimmer"] = rng.uniform(2.0, 500.0, units)
    table = faults(netlist)
    names = [list(table)[k] for k in rng.integers(0, len(table), units)]
    for unit, name in enumerate(names):
        single = {key: array[unit : unit + 1].copy() for key, array in values.items()}
        table[name](single)
        for key, array in single.items():
            values[key][unit] = array[0]
    return values, names
