"""What overload does to the parts of the simulated unit: small thermal masses, and where they give way.

Junctions
---------
`benchkit.rehearsal.warmth` moves a junction with one time constant, which is right for seconds and minutes and far too
slow for what kills a transistor.  Inside the part of its thermal resistance that belongs to the device (`ratings`:
junction to case) heat finds masses from a fraction of a millisecond to half a second on its way, `JUNCTION_NODES`: a
Foster network that follows the square root of the time, as the transient thermal impedance of power transistors in data
sheets does.  Its shares and times are our own figures.  At rest both descriptions give the same temperature:

    hot spot = warmth's temperature + what the quick masses hold - what warmth counted for the same resistance.

A hot spot `JUNCTION_MARGIN_K` above the maximum fuses collector to emitter.  Second breakdown at high voltage, and
base-emitter junctions that are torn open backwards, are not modelled.

Resistors and the trimmer's track
---------------------------------
One mass each: the average power over the time constant of its kind.  `RESISTOR_MARGIN` times the rating opens it, so
that a resistor swallows about margin x rating x time constant at once (a 3 W emitter resistor 48 J, a quarter-watt film
resistor 2 J: our own figures).  A trimmer's wiper stands the current that would heat the whole track to its rating
(common practice); the track gives way under the wiper.

What is above its rating and has not given way is *overloaded*: noted, and no more.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final, Literal

import numpy as np
from numpy.typing import NDArray

from benchkit.rehearsal.ratings import CASE_C, junction_ratings, resistor_ratings
from benchkit.stage.design import Design
from benchkit.stage.heat import heat_nodes

JUNCTION_MARGIN_K: Final = 25.0
JUNCTION_NODES: Final = ((0.12, 0.001), (0.25, 0.008), (0.33, 0.06), (0.30, 0.4))
"""Share of the resistance from junction to case, and time constant (s)."""
RESISTOR_MARGIN: Final = 4.0
RESISTOR_LAG_S: Final = {"emitter": 4.0, "trimmer": 1.0}
FILM_LAG_S: Final = 2.0

GivesWay = Literal["collector-emitter short", "open", "wiper open"]

_BISECTIONS: Final = 30
_Array = NDArray[np.float64]


@dataclass(frozen=True)
class Burnt:
    """A part that has given way.

    Parameters
    ----------
    part : str
    fault : str
        What it has become, in the words of the fault table.
    why : str
        What was too much, in words.
    at_s : float
        When, in the unit's own time (s).
    """

    part: str
    fault: GivesWay
    why: str
    at_s: float

    def __str__(self) -> str:
        return f"{self.part}: {self.fault} ({self.why})"


class Strain:
    """The quick thermal masses of one unit.

    Parameters
    ----------
    design : Design
    spared : frozenset of str
        Parts that can't give way, because there is nothing left of them to do so.
    """

    def __init__(self, design: Design, spared: frozenset[str] = frozenset()) -> None:
        nodes = heat_nodes(design)
        self._junctions = junction_ratings(design)
        self._resistors = resistor_ratings(design)
        self._names = tuple(rating.part for rating in self._junctions)
        self._most_c = np.array([rating.most_c for rating in self._junctions])
        to_case = np.array([rating.to_case_k_per_w for rating in self._junctions])
        shares, lags = np.array([share for share, _ in JUNCTION_NODES]), [lag for _, lag in JUNCTION_NODES]
        self._quick_k_per_w = to_case[:, None] * shares[None, :]
        self._quick_lag_s = np.array(lags)
        # What warmth counts for the same resistance, with its own time constant; nothing where it counts none.
        counted = nodes.own() > 0.0
        self._counted_k_per_w = np.where(counted, to_case, 0.0)
        self._counted_lag_s = nodes.lag_s[: len(self._names)]
        self._quick_k = np.zeros_like(self._quick_k_per_w)
        self._counted_k = np.zeros(len(self._names))
        self._rated_w = np.array([rating.power_w for rating in self._resistors])
        self._lag_s = np.array([RESISTOR_LAG_S.get(rating.role, FILM_LAG_S) for rating in self._resistors])
        self._average_w = np.zeros(len(self._resistors))
        self._alive = np.array([name not in spared for name in self._names])
        self._whole = np.array([rating.part not in spared for rating in self._resistors])
        self.overloaded: dict[str, float] = {}
        """Parts that were above their ratings, and the highest multiple of the rating (junctions: of their rise)."""

    def spare(self, parts: frozenset[str]) -> None:
        """Let nothing more happen to parts of which nothing is left."""
        self._set(parts, False)

    def renew(self, parts: frozenset[str]) -> None:
        """Take parts as new: whole, and cold."""
        self._set(parts, True)

    def _set(self, parts: frozenset[str], whole: bool) -> None:
        for row, name in enumerate(self._names):
            if name in parts:
                self._alive[row], self._quick_k[row], self._counted_k[row] = whole, 0.0, 0.0
        for row, rating in enumerate(self._resistors):
            if rating.part in parts:
                self._whole[row], self._average_w[row] = whole, 0.0

    def hot_spots_c(self, temperatures_c: Mapping[str, float]) -> dict[str, float]:
        """Return the hottest place (degC) of every transistor, from warmth's temperatures."""
        return dict(zip(self._names, self._spots(self._base(temperatures_c)).tolist(), strict=True))

    def step(
        self,
        temperatures_c: Mapping[str, float],
        powers_w: Mapping[str, float],
        resistors_w: Mapping[str, float],
        seconds: float,
        now_s: float,
    ) -> tuple[Burnt, ...]:
        """Move all masses by `seconds` with the powers held still; return what has given way by then.

        Parameters
        ----------
        temperatures_c : mapping
            Warmth's temperatures at the end of the step.
        powers_w, resistors_w : mapping
            What heats transistors and resistors (W), by part name.
        seconds : float
        now_s : float
            The unit's own time at the end of the step, for the note.
        """
        junction_w, resistor_w = self._powers(powers_w, resistors_w)
        self._quick_k, self._counted_k, self._average_w = self._ahead(junction_w, resistor_w, seconds)
        spots_c = self._spots(self._base(temperatures_c))
        self._note(spots_c)
        burnt = []
        for row in np.flatnonzero(self._alive & (spots_c > self._most_c + JUNCTION_MARGIN_K)):
            self._alive[row] = False
            why = f"its junction reached {spots_c[row]:.0f} degC; rated for {self._most_c[row]:.0f} degC"
            burnt.append(Burnt(self._names[row], "collector-emitter short", why, now_s))
        for row in np.flatnonzero(self._whole & (self._average_w > RESISTOR_MARGIN * self._rated_w)):
            self._whole[row] = False
            rating = self._resistors[row]
            what = "as much as" if rating.role != "trimmer" else "as if the whole track had"
            why = f"{what} {self._average_w[row]:.3g} W for {self._lag_s[row]:g} s; rated for {rating.power_w:g} W"
            burnt.append(Burnt(rating.part, "wiper open" if rating.role == "trimmer" else "open", why, now_s))
        return tuple(burnt)

    def stands_s(
        self,
        temperatures_c: Mapping[str, float],
        powers_w: Mapping[str, float],
        resistors_w: Mapping[str, float],
        most_s: float,
    ) -> float:
        """Return how long all parts stand these powers, at most `most_s`; a little longer than the weakest does."""
        base_c = self._base(temperatures_c)
        junction_w, resistor_w = self._powers(powers_w, resistors_w)
        if not self._gives_way(base_c, junction_w, resistor_w, most_s):
            return most_s
        low_s, high_s = 0.0, most_s
        for _ in range(_BISECTIONS):
            middle_s = 0.5 * (low_s + high_s)
            if self._gives_way(base_c, junction_w, resistor_w, middle_s):
                high_s = middle_s
            else:
                low_s = middle_s
        return high_s

    def _gives_way(self, base_c: _Array, junction_w: _Array, resistor_w: _Array, seconds: float) -> bool:
        quick_k, _, average_w = self._ahead(junction_w, resistor_w, seconds)
        # What warmth counts for the same resistance moves in both terms; a step moves its other nodes by little.
        spots_c = base_c + quick_k.sum(axis=1) - self._counted_k
        hot = self._alive & (spots_c > self._most_c + JUNCTION_MARGIN_K)
        return bool(hot.any() or (self._whole & (average_w > RESISTOR_MARGIN * self._rated_w)).any())

    def _ahead(self, junction_w: _Array, resistor_w: _Array, seconds: float) -> tuple[_Array, _Array, _Array]:
        quick = -np.expm1(-seconds / self._quick_lag_s)
        counted = -np.expm1(-seconds / self._counted_lag_s)
        average = -np.expm1(-seconds / self._lag_s)
        return (
            self._quick_k + quick * (self._quick_k_per_w * junction_w[:, None] - self._quick_k),
            self._counted_k + counted * (self._counted_k_per_w * junction_w - self._counted_k),
            self._average_w + average * (resistor_w - self._average_w),
        )

    def _base(self, temperatures_c: Mapping[str, float]) -> _Array:
        return np.array([temperatures_c[name] for name in self._names])

    def _spots(self, base_c: _Array) -> _Array:
        return np.asarray(base_c + self._quick_k.sum(axis=1) - self._counted_k)

    def _powers(self, powers_w: Mapping[str, float], resistors_w: Mapping[str, float]) -> tuple[_Array, _Array]:
        junction_w = np.array([max(powers_w[name], 0.0) for name in self._names])
        return junction_w, np.array([resistors_w.get(rating.part, 0.0) for rating in self._resistors])

    def _note(self, spots_c: _Array) -> None:
        """Remember what is above its rating without having given way."""
        for row in np.flatnonzero(self._alive & (spots_c > self._most_c)):
            share = (spots_c[row] - CASE_C) / (self._most_c[row] - CASE_C)
            self._remember(self._names[row], float(share))
        for row in np.flatnonzero(self._whole & (self._average_w > self._rated_w)):
            self._remember(self._resistors[row].part, float(self._average_w[row] / self._rated_w[row]))

    def _remember(self, part: str, share: float) -> None:
        if math.isfinite(share):
            self.overloaded[part] = max(self.overloaded.get(part, 0.0), share)
