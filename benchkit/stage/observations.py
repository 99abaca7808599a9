"""What was read, as the model takes it: a point, the condition it was read under, a value and its uncertainty."""

from __future__ import annotations

from dataclasses import dataclass

from benchkit.stage.conditions import Condition, Unpowered

Conditions = tuple[Condition | Unpowered, ...]
"""One condition; or several, in order, when a reading was taken somewhere from the first to the last of them (a powered
stage is nowhere between cold and warm exactly, a trim nowhere exactly within its tolerance). All readings under the
same conditions were taken at one and the same place between them."""


@dataclass(frozen=True, kw_only=True)
class Observation:
    """One reading of one unit.

    Attributes
    ----------
    conditions : tuple of Condition or Unpowered
        See `Conditions`.
    point : str
        A modelled test point.
    value : float
        In the point's unit; infinite for an overload.
    standard_uncertainty : float
        Of the reading, in the point's unit.
    event : bool
        Something that happened and no number that was measured, such as a rail that came into its limit: it is
        explained or not, but how sharply says nothing for or against a hypothesis.
    """

    conditions: Conditions
    point: str
    value: float
    standard_uncertainty: float
    event: bool = False
