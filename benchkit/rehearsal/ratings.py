"""What the parts of the simulated unit stand: the design's ratings, or stated defaults where it has none.

Where a figure comes from
-------------------------
* ``[ratings]`` of the design, looked up by the part's full name, then by its name without the pair's number
  (``output.upper``), then by its role (``output``, ``emitter``, ``stopper``, ``driver.resistor``, ``feed``,
  ``spreader``, ``trimmer``).
* Without one, a resistor has the smallest size of `RESISTOR_SIZES_W` that is `ROOM` times what it dissipates in the
  nominal unit, trimmed and warm, at full rails (common practice: half its rating at most).
* A transistor without a power rating: an output device follows from the design's own thermal resistance, of which the
  washer is taken to be a third (common practice); the others have `TRANSISTOR_W` by role (our own figures, of the size
  that such parts have).
* A maximum junction temperature of `JUNCTION_C` (common practice for silicon).

From a power rating at a case of 25 degC follows the resistance from junction to case, (T_max - 25 degC)/P: that is how
derating curves of data sheets are drawn.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Final

from benchkit.circuit.netlist import Resistor
from benchkit.stage.design import Design, Rating
from benchkit.stage.draws import nominal
from benchkit.stage.heat import heat_nodes
from benchkit.stage.operate import Solved, solve_units
from benchkit.stage.points import Part, parts_of, transistors_of
from benchkit.stage.trimmer import full_rails

JUNCTION_C: Final = 150.0
CASE_C: Final = 25.0
ROOM: Final = 2.0
RESISTOR_SIZES_W: Final = (0.25, 0.5, 1.0, 2.0, 3.0, 5.0, 10.0, 20.0)
TRANSISTOR_W: Final = {"spreader": 0.5, "driver": 10.0, "predriver": 10.0}
WASHER_SHARE: Final = 1.0 / 3.0
"""Share of the resistance from junction to heat sink that lies outside the case."""
TRIMMER: Final = "spreader.trimmer"


@dataclass(frozen=True)
class JunctionRating:
    """What a transistor stands.

    Parameters
    ----------
    part : str
    most_c : float
        Maximum junction temperature.
    to_case_k_per_w : float
        The part of its thermal resistance that is quick.
    """

    part: str
    most_c: float
    to_case_k_per_w: float


@dataclass(frozen=True)
class ResistorRating:
    """What a resistor, or a trimmer's track over its whole length, stands (W)."""

    part: str
    power_w: float
    role: str


@lru_cache(maxsize=64)
def junction_ratings(design: Design) -> tuple[JunctionRating, ...]:
    """Return what every transistor of a design stands, in the order of `transistors_of`; cached."""
    own = dict(zip(heat_nodes(design).parts, heat_nodes(design).own().tolist(), strict=True))
    return tuple(_junction(design, part, own[part.name]) for part in transistors_of(design))


def _junction(design: Design, part: Part, own_k_per_w: float) -> JunctionRating:
    rating = rating_of(design, part.name, part.role)
    most_c = rating.junction_c if rating is not None and rating.junction_c is not None else JUNCTION_C
    power_w = rating.power_w if rating is not None else None
    if power_w is not None:
        to_case = (most_c - CASE_C) / power_w
    elif part.role == "output":
        to_case = (1.0 - WASHER_SHARE) * own_k_per_w
    else:
        to_case = (most_c - CASE_C) / TRANSISTOR_W[part.role]
    # A design that states a resistance to the air or to the sink states the whole of it.
    return JunctionRating(part.name, most_c, min(to_case, own_k_per_w) if own_k_per_w > 0.0 else to_case)


@lru_cache(maxsize=64)
def resistor_ratings(design: Design) -> tuple[ResistorRating, ...]:
    """Return what every resistor of a design and its trimmer's track stand; cached."""
    usual_w: dict[str, float] | None = None
    found = []
    for part in parts_of(design):
        if part.kind not in ("resistor", "trimmer"):
            continue
        role = _role(part)
        rating = rating_of(design, part.name, role)
        power_w = rating.power_w if rating is not None else None
        if power_w is None:
            if usual_w is None:
                usual_w = usual_powers_w(design)
            wanted_w = ROOM * usual_w.get(part.name, 0.0)
            power_w = next((size for size in RESISTOR_SIZES_W if size >= wanted_w), wanted_w)
        found.append(ResistorRating(part.name, power_w, role))
    return tuple(found)


def _role(part: Part) -> str:
    if part.kind == "trimmer":
        return "trimmer"
    return f"{part.role}.resistor" if part.role in ("driver", "predriver") else part.role


def rating_of(design: Design, name: str, role: str) -> Rating | None:
    """Return the design's entry for a part: by its name, by its name without the pair's number, or by its role."""
    ratings = design.ratings
    return ratings.get(name) or ratings.get(".".join(name.split(".")[:2])) or ratings.get(role)


def usual_powers_w(design: Design) -> dict[str, float]:
    """Return what each resistor and the track dissipate in the nominal unit, trimmed and warm, at full rails (W)."""
    for condition in (full_rails(design), full_rails(design, when="cold")):
        solved = solve_units(design, nominal(design), condition, loading="none")
        if bool(solved.converged[0]):
            return resistor_powers_w(design, solved)
    return {}


def resistor_powers_w(design: Design, solved: Solved) -> dict[str, float]:
    """Return what heats each resistor of the first unit, and what its current would do to the whole track (W)."""
    solution = solved.solution
    elements = solution.netlist.elements
    powers: dict[str, float] = {}
    for part in parts_of(design):
        if part.kind == "resistor":
            current_a = float(solution.current(part.name)[0])
            element = elements[part.name]
            assert isinstance(element, Resistor)
            powers[part.name] = abs(current_a * float(solution.between(element.a, element.b)[0]))
        elif part.kind == "trimmer":
            sections = [name for name in (TRIMMER, f"{TRIMMER}.upper", f"{TRIMMER}.lower") if name in elements]
            most_a = max(abs(float(solution.current(name)[0])) for name in sections)
            powers[part.name] = most_a**2 * part.nominal
    return powers
