"""Kirchhoff's current law, written a second time: one unit, one element after another, plain floating point.

Nothing here is shared with the solver but the solution's node voltages and element values.
"""

from __future__ import annotations

import math
from collections import defaultdict

from benchkit.circuit.netlist import (
    TRANSISTOR_DEFAULTS,
    Netlist,
    Ohmmeter,
    Resistor,
    Servo,
    Source,
    Supply,
    Transistor,
)
from benchkit.circuit.solve import Solution

BOLTZMANN, CHARGE = 1.380649e-23, 1.602176634e-19


def diode(volts: float, saturation: float, slope: float) -> float:
    return saturation * math.expm1(min(volts / slope, 300.0)) if saturation > 0.0 else 0.0


def transistor_currents(p: dict[str, float], vbe: float, vbc: float) -> tuple[float, float]:
    """Collector and base current from the textbook form with qb, q1, q2."""
    t = p["kelvin"]
    vt = BOLTZMANN * t / CHARGE
    growth = (t / 300.15 - 1.0) * p["EG"] / vt + p["XTI"] * math.log(t / 300.15)
    gain = (t / 300.15) ** p["XTB"]
    saturation = p["IS"] * math.exp(growth)
    forward = diode(vbe, saturation, p["NF"] * vt)
    reverse = diode(vbc, saturation, p["NR"] * vt)
    q1 = 1.0 / (1.0 - vbc / p["VAF"] - vbe / p["VAR"])
    q2 = forward / p["IKF"] + reverse / p["IKR"]
    qb = q1 / 2.0 * (1.0 + math.sqrt(1.0 + 4.0 * q2))
    leak_e = diode(vbe, p["ISE"] * math.exp(growth / p["NE"]) / gain, p["NE"] * vt)
    leak_c = diode(vbc, p["ISC"] * math.exp(growth / p["NC"]) / gain, p["NC"] * vt)
    back = reverse / (p["BR"] * gain) + leak_c + 1e-12 * vbc
    return (forward - reverse) / qb - back, forward / (p["BF"] * gain) + leak_e + 1e-12 * vbe + back


def left_over(netlist: Netlist, solution: Solution, unit: int) -> tuple[float, str]:
    """Largest share of a node's currents that is left over at it, and which node; 10 pA count as nothing."""
    sums: dict[str, float] = defaultdict(float)
    sizes: dict[str, float] = defaultdict(float)
    volts = {name: float(solution.x[k, unit]) for name, k in solution.plan.index.items() if k < solution.plan.size}
    volts["0"] = 0.0

    def value(key: str) -> float:
        array = solution.values[key]
        return float(array[unit if len(array) > 1 else 0])

    def flow(a: str, b: str, amps: float) -> None:
        sums[a] += amps
        sums[b] -= amps
        sizes[a] += abs(amps)
        sizes[b] += abs(amps)

    for e in netlist.elements.values():
        if isinstance(e, Resistor):
            flow(e.a, e.b, (volts[e.a] - volts[e.b]) / max(value(e.name), 1e-3))
        elif isinstance(e, Supply):
            lack, limit = value(f"{e.name}.volts") - (volts[e.plus] - volts[e.minus]), value(f"{e.name}.limit_a")
            flow(e.minus, e.plus, limit * math.tanh(lack / (limit * 0.01)) + 1e-6 * lack)
        elif isinstance(e, Source):
            flow(
                e.from_node,
                e.to_node,
                value(f"{e.name}.amps") * math.tanh((volts[e.from_node] - volts[e.to_node]) / 0.3),
            )
        elif isinstance(e, Servo):
            error = volts[e.sense] - volts[e.reference] - value(f"{e.name}.rest_v")
            error = -error if e.senses == "to" else error
            grip = 0.5 * (1.0 + math.tanh(error / 10e-6))
            hold = math.tanh((volts[e.from_node] - volts[e.to_node]) / 0.3)
            flow(e.from_node, e.to_node, value(f"{e.name}.max_a") * grip * hold)
        elif isinstance(e, Ohmmeter):
            lack = value(f"{e.name}.compliance_v") - (volts[e.plus] - volts[e.minus])
            flow(e.minus, e.plus, value(f"{e.name}.amps") * math.tanh(lack / 0.05))
        elif isinstance(e, Transistor):
            p = {key: value(f"{e.name}.{key}") for key in TRANSISTOR_DEFAULTS}
            ends = []
            for outside, key in ((e.collector, "RC"), (e.base, "RB"), (e.emitter, "RE")):
                inside = f"{e.name}\x00{key}"
                if inside in volts:
                    flow(outside, inside, (volts[outside] - volts[inside]) / max(p[key], 1e-4))
                    ends.append(inside)
                else:
                    assert p[key] == 0.0
                    ends.append(outside)
            c, b, m = ends
            sign = p["polarity"]
            ic, ib = transistor_currents(p, sign * (volts[b] - volts[m]), sign * (volts[b] - volts[c]))
            flow(c, m, sign * ic)
            flow(b, m, sign * ib)
        else:
            flow(e.a, e.b, float(solution.current(e.name)[unit]))
            error = volts[e.p] - volts[e.q] - value(f"{e.name}.volts")
            assert abs(error) < 1e-8, f"{e.name} misses its condition by {error} V"
    for node in list(sums):
        flow(node, "0", 1e-12 * volts[node])
    sums.pop("0", None)
    return max((max(abs(sums[n]) - 10e-12, 0.0) / max(sizes[n], 1e-300), n) for n in sums)
