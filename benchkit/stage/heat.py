"""Heat: junction temperatures in balance with given powers.

Nodes: the heat sink carries the output devices; drivers and spreader see a share of its rise (their tracking) and heat
themselves to the ambient. Emitter resistors, feeds and drivers are taken to shed their heat to the air.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from benchkit.stage.design import Design
from benchkit.stage.draws import Array
from benchkit.stage.points import transistors_of


@dataclass(frozen=True)
class Heat:
    """Temperatures in balance.

    Attributes
    ----------
    temperatures_c : dict of str to array of shape (units,)
        Junctions by part name, and ``heatsink``.
    """

    temperatures_c: dict[str, Array]


def heat(design: Design, powers_w: Mapping[str, Array], ambient_c: float) -> Heat:
    """Temperatures that given powers lead to when everything has come to rest.

    Parameters
    ----------
    design : Design
    powers_w : mapping
        What heats each transistor (W), arrays of shape (units,).
    ambient_c : float

    Returns
    -------
    Heat
        sink = ambient + theta_sink * (sum of the output devices' P); output junction = sink + theta_junction * P;
        driver and spreader = ambient + tracking * (rise of the sink) + theta_own * P.
    """
    thermal = design.thermal
    parts = transistors_of(design)
    total_w = np.sum([powers_w[part.name] for part in parts if part.role == "output"], axis=0)
    rise_k = thermal.heatsink_k_per_w * total_w
    temperatures: dict[str, Array] = {}
    for part in parts:
        power_w = powers_w[part.name]
        if part.role == "output":
            temperatures[part.name] = ambient_c + rise_k + thermal.junction_to_heatsink_k_per_w * power_w
        elif part.role == "spreader":
            own_k = thermal.spreader_to_ambient_k_per_w * power_w
            temperatures[part.name] = ambient_c + thermal.spreader_tracking * rise_k + own_k
        else:
            own_k = thermal.driver_to_ambient_k_per_w * power_w
            temperatures[part.name] = ambient_c + (thermal.driver_tracking or 0.0) * rise_k + own_k
    temperatures["heatsink"] = ambient_c + rise_k
    return Heat(temperatures)
