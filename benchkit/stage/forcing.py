"""A supply in its current limit: the rail is taken at the voltage that was read there.

Against its limit a supply is a current source, and what voltage its rail falls to hangs on microamperes: the search for
the likeliest unit would go along the edge of a knife. Read the other way round the same circuit is well behaved: with
the rail at the voltage that was read, the current must be the limit. So, where a rail was read clearly below its
setting, every hypothesis is solved with that rail held at the reading, and has to explain the current: the one that was
read, or else the limit, which a supply keeps within a percent or so (common practice). Both rails must have been read:
one that nobody looked at may stand against its own limit.

The changed condition says which rails are held; at what voltage is data of each unit. So units whose rails fell in the
same pattern, each to voltages of its own, still are read alike and are worked out together.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, fields, replace
from typing import NamedTuple

from benchkit.stage.conditions import Condition
from benchkit.stage.observations import Conditions, Observation

FALLEN_SHARE = 0.97
FALLEN_V = 0.05
"""A rail that reads below this share of its setting less this voltage has fallen: the supply limits."""
LIMIT_SHARE = 0.01
"""Standard uncertainty of a supply's limit, as a share."""
FREE_FACTOR = 50.0
"""By how much the limit is raised for a rail that is held."""
LEAST_HELD_V = 1e-3


@dataclass(frozen=True, kw_only=True)
class Held(Condition):
    """A condition with rails that don't stand at the voltages that they were set to, but at each unit's own.

    Parameters
    ----------
    held : (bool, bool)
        Whether the positive and the negative rail are held.
    """

    held: tuple[bool, bool] = (False, False)


class Taken(NamedTuple):
    """Readings with fallen rails taken as they were read.

    Attributes
    ----------
    observations : list of Observation
        With changed conditions where a rail was held, and the limit as a reading where no current was read.
    original : dict
        Changed conditions to those that were stated.
    rails_v : dict
        Changed conditions to the voltages of positive and negative rail; not a number where a rail is not held.
    """

    observations: list[Observation]
    original: dict[Conditions, Conditions]
    rails_v: dict[Conditions, tuple[float, float]]


def held_at_readings(observations: Sequence[Observation]) -> Taken:
    """Take rails that have fallen at their readings."""
    fallen: dict[Conditions, dict[str, float]] = {}
    for one in observations:
        first = one.conditions[0]
        if not isinstance(first, Condition) or first.limit_a is None or one.point not in ("rail+", "rail-"):
            continue
        set_v = first.positive_v if one.point == "rail+" else -first.negative_v
        read_v = one.value if one.point == "rail+" else -one.value
        if math.isfinite(read_v) and read_v < FALLEN_SHARE * set_v - FALLEN_V:
            fallen.setdefault(one.conditions, {})[one.point] = max(read_v, LEAST_HELD_V)
    seen = {(one.conditions, one.point) for one in observations if math.isfinite(one.value)}
    fallen = {
        conditions: rails
        for conditions, rails in fallen.items()
        if all((conditions, rail) in seen for rail in _rails_of(conditions))
    }
    if not fallen:
        return Taken(list(observations), {}, {})
    changed = {conditions: _held(conditions, rails) for conditions, rails in fallen.items()}
    result = [
        replace(one, conditions=changed[one.conditions]) if one.conditions in changed else one for one in observations
    ]
    read = {(one.conditions, one.point) for one in observations}
    for conditions, rails in fallen.items():
        first = conditions[0]
        assert isinstance(first, Condition)
        assert first.limit_a is not None
        limit_a = first.limit_a
        for rail in rails:
            if (conditions, f"{rail}.current") not in read:
                result.append(
                    Observation(
                        conditions=changed[conditions], point=f"{rail}.current", value=limit_a,
                        standard_uncertainty=LIMIT_SHARE * limit_a,
                    )
                )  # fmt: skip
    rails_v = {
        changed[conditions]: (rails.get("rail+", math.nan), -rails.get("rail-", math.nan))
        for conditions, rails in fallen.items()
    }
    return Taken(result, {new: old for old, new in changed.items()}, rails_v)


def _rails_of(conditions: Conditions) -> tuple[str, ...]:
    first = conditions[0]
    assert isinstance(first, Condition)
    return ("rail+",) if first.negative_v == 0.0 else ("rail+", "rail-")


def _held(conditions: Conditions, rails: dict[str, float]) -> Conditions:
    """The same conditions with some rails held and a limit that is out of the way."""
    result = []
    for one in conditions:
        assert isinstance(one, Condition)
        assert one.limit_a is not None
        stated = {field.name: getattr(one, field.name) for field in fields(one)}
        stated["limit_a"] = FREE_FACTOR * one.limit_a
        result.append(Held(**stated, held=("rail+" in rails, "rail-" in rails)))
    return tuple(result)
