"""What all events are made of."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar, Literal

import pydantic

Verdict = Literal["pass", "fail", "undecided"]


@dataclass(frozen=True, kw_only=True)
class SupplyState:
    """What the supply says of itself.

    Parameters
    ----------
    output_on : bool or None
        As read back; ``None`` when it could not be read.
    positive_v, negative_v, positive_a, negative_a : float or None
        Measured at its terminals.
    set_positive_v, set_negative_v, limit_a : float or None
        As read back from its settings.
    positive_in_limit, negative_in_limit : bool
        The rail is held by its current limit instead of its voltage.
    positive_tripped, negative_tripped : bool
        The supply's own protection has switched that output off.
    protection_positive_v, protection_negative_v : float or None
        Its over-voltage protection as read back, as magnitudes; ``None`` when it has none or could not be read.
    """

    output_on: bool | None = None
    positive_v: float | None = None
    negative_v: float | None = None
    positive_a: float | None = None
    negative_a: float | None = None
    set_positive_v: float | None = None
    set_negative_v: float | None = None
    limit_a: float | None = None
    positive_in_limit: bool = False
    negative_in_limit: bool = False
    positive_tripped: bool = False
    negative_tripped: bool = False
    protection_positive_v: float | None = None
    protection_negative_v: float | None = None

    @property
    def in_limit(self) -> bool:
        """True when either rail is held by its current limit."""
        return self.positive_in_limit or self.negative_in_limit

    @property
    def tripped(self) -> bool:
        """True when the supply's own protection has switched either output off."""
        return self.positive_tripped or self.negative_tripped


@dataclass(frozen=True, kw_only=True)
class PointLimits:
    """What one reading should be: nominal, lowest and highest, in the point's unit (V, A, ohm, degC)."""

    point: str
    unit: str
    nominal: float | None
    low: float | None
    high: float | None


@dataclass(frozen=True, kw_only=True)
class Event:
    """Base of all events."""

    name: ClassVar[str] = ""
    __pydantic_config__: ClassVar[pydantic.ConfigDict] = pydantic.ConfigDict(extra="forbid", allow_inf_nan=False)
