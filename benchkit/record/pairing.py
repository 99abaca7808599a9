"""Readings side by side: what one test point read before and after, and whether the meters can tell the two apart.

Rules
-----
* Only what stands counts: of a point that was measured again, the last reading.  Extra readings for suspects and
  readings with the stage driven are left out: they were taken under conditions of their own.
* A reading is put beside one at the same rails where there is one.  Where there is none, the last one is shown all the
  same, and at which rails it was taken is said.
* The uncertainty of a change is that of two readings that know nothing of each other, u² = u₁² + u₂² (JCGM 100:2008,
  5.1.2).  Two readings of one meter share part of their error, so that this is rather too much than too little.
* A change of less than twice that (about 95 %, JCGM 100:2008, 6.3.3) is called within the meters' uncertainty.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any

from benchkit.record.facts import Result

KEY_POINTS = re.compile(r"emitter\.(upper|lower|pair)\.\d+|output(\.ac)?|rail[+-]\.(current|drop)")
"""What two records of one unit are compared by: trimmed drops, offset, a.c. at rest, currents."""

COVERAGE = 2.0
"""Standard uncertainties that a change has to exceed before it is called one."""

SAME_RAILS_SHARE = 0.02
SAME_RAILS_V = 0.1
"""Rails that differ by less than this share and these volts more are the same (our own figures)."""

Rails = tuple[float, float]


@dataclass(frozen=True, kw_only=True)
class Change:
    """One test point before and after; either may be missing, not both."""

    point: str
    before: Result | None
    after: Result | None

    @property
    def unit(self) -> str:
        """The unit of both readings."""
        shown = self.after or self.before
        return shown.reading.unit if shown is not None and shown.reading is not None else ""

    @property
    def amount(self) -> float | None:
        """After less before, in `unit`; None where either is missing or over the meter's range."""
        before, after = _value(self.before), _value(self.after)
        return None if before is None or after is None else after - before

    @property
    def share(self) -> float | None:
        """The change as a share of the reading before; None where that is zero or may be."""
        before, amount = _value(self.before), self.amount
        if before is None or amount is None or self.point in ("output", "output.ac"):
            return None
        return amount / before if abs(before) > COVERAGE * (_uncertainty(self.before) or 0.0) else None

    @property
    def uncertainty(self) -> float | None:
        """Standard uncertainty of the change; None where a meter's is not known."""
        before, after = _uncertainty(self.before), _uncertainty(self.after)
        return None if before is None or after is None else math.hypot(before, after)

    @property
    def moved(self) -> bool | None:
        """Whether there is more of a change than the meters explain; None where that can't be told."""
        amount, uncertainty = self.amount, self.uncertainty
        return None if amount is None or uncertainty is None else abs(amount) > COVERAGE * uncertainty

    @property
    def same_rails(self) -> bool:
        """Whether both were taken at the same rails, as far as that is known."""
        if self.before is None or self.after is None:
            return True
        return _same(self.before.rails_v, self.after.rails_v)

    def limits(self) -> tuple[float | None, float | None]:
        """Return the limits of the reading after, or of the one before where that has none."""
        for side in (self.after, self.before):
            if side is not None and side.judged is not None:
                return side.judged.low, side.judged.high
        return None, None

    def as_json(self) -> dict[str, Any]:
        """Return the change for a program; a number that is not there is None."""
        low, high = self.limits()
        return {
            "point": self.point,
            "unit": self.unit,
            "before": _side(self.before),
            "after": _side(self.after),
            "change": self.amount,
            "share": self.share,
            "standard_uncertainty": self.uncertainty,
            "beyond_uncertainty": self.moved,
            "same_rails": self.same_rails,
            "low": low,
            "high": high,
        }


def changes(before: Iterable[Result], after: Iterable[Result]) -> tuple[Change, ...]:
    """Put the readings of two sets side by side, one row a test point, in the order of the second set."""
    first, second = standing(before), standing(after)
    found: list[Change] = []
    for point in dict.fromkeys(one.subject for one in (*second, *first)):
        afters = [one for one in second if one.subject == point]
        befores = [one for one in first if one.subject == point]
        found.append(Change(point=point, before=_beside(befores, afters), after=afters[-1] if afters else None))
    return tuple(found)


def standing(results: Iterable[Result]) -> Sequence[Result]:
    """Return the readings that count, in their order."""
    return [one for one in results if one.reading is not None and not one.replaced and not one.extra and not one.driven]


def rails_words(rails: Rails | None) -> str:
    """Return rails in words.

    Examples
    --------
    >>> rails_words((15.0, -15.0)), rails_words(None)
    ('+15 V -15 V', 'no power')
    """
    if rails is None:
        return "no power"
    return " ".join(f"{volts:+.3g} V" for volts in rails)


def _beside(befores: Sequence[Result], afters: Sequence[Result]) -> Result | None:
    """Return the last of `befores` that was taken at the rails of the last of `afters`, else the last of all."""
    if afters:
        alike = [one for one in befores if _same(one.rails_v, afters[-1].rails_v)]
        befores = alike or befores
    return befores[-1] if befores else None


def _same(one: Rails | None, other: Rails | None) -> bool:
    if one is None or other is None:
        return one is other
    return all(
        abs(a - b) <= SAME_RAILS_SHARE * max(abs(a), abs(b)) + SAME_RAILS_V for a, b in zip(one, other, strict=True)
    )


def _value(result: Result | None) -> float | None:
    return None if result is None or result.reading is None else result.reading.value


def _uncertainty(result: Result | None) -> float | None:
    return None if result is None or result.reading is None else result.reading.standard_uncertainty


def _side(result: Result | None) -> dict[str, Any] | None:
    if result is None or result.reading is None:
        return None
    return {
        "line": result.seq,
        "at": result.at,
        "section": result.section,
        "step": result.step,
        "value": result.reading.value,
        "overload": result.reading.overload,
        "standard_uncertainty": result.reading.standard_uncertainty,
        "verdict": result.verdict,
        "condition": result.condition,
        "rails_v": None if result.rails_v is None else list(result.rails_v),
    }
