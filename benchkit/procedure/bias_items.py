"""The items around a bias: trims, waits until it has come to rest, readings judged by the target, and the way back.

Rules
-----
* A trim can be read at any point where the target is known (`benchkit.procedure.targets`).  Only a reading at pair 1
  tells the model where the trimmer is; after a trim by another point it is anywhere, and limits are as wide as that.
* What comes to rest is what the meter is clipped to: the last trim's point, or the last clip's.
* A check of the target may lead back to the trim before it, when the supply then stands as it stood there.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Literal

from benchkit import quantities
from benchkit.errors import EntryError, ModelError
from benchkit.judge.limits import Limits
from benchkit.procedure.file import Procedure, Step
from benchkit.procedure.file_words import COLD_PRESET, MOST_DRIFT
from benchkit.procedure.items import TELLS_TARGET, TRIMMED, Item
from benchkit.procedure.power_off import PowerOff
from benchkit.procedure.targets import drift_per_s, preset_share, target_limits, tells_target
from benchkit.stage.conditions import Condition
from benchkit.stage.points import Point


@dataclass(frozen=True)
class Trimmed:
    """A trim that the plan holds: the item, its section, and how the supply stands there."""

    item: str
    section: str
    apart: bool
    supply: tuple[bool, float, float, float]


class BiasItems(PowerOff):
    """A part of the planner; what it stands on is the planner's."""

    procedure: Procedure
    trimmer: Literal["least", "target", "unknown"]
    share: float
    trimmed: str = TRIMMED
    apart: bool = False
    soaked: bool = False

    def __init__(self) -> None:
        self._trims: dict[str, Trimmed] = {}

    @property
    def supply_now(self) -> tuple[bool, float, float, float]:
        """How the supply stands at this place of the plan."""
        return (self.on, self.positive_v, self.negative_v, self.limit_a) if self.on else (False, 0.0, 0.0, 0.0)

    def _trim(self, step: Step) -> Iterator[Item]:
        self._not_on_lamp(step, "trims")
        if not self.on:
            raise self._refuse(step, "trims while the supply is off")
        preset = step.share == COLD_PRESET
        share = preset_share(self.design) if preset else quantities.parse(step.share or "100 %", "%") / 100.0
        when = step.when or ("cold" if preset or share < 1.0 else self.design.target.when)
        for name in step.points:
            for point in self._expand(name):
                limits = self._target(step, point, share=share, when=when)
                item = self._item(
                    step, "trim", f".{point.name}", point=point, limits=limits, samples=step.samples, share=share,
                    slope_under=Condition(
                        positive_v=self.positive_v, negative_v=self.negative_v, limit_a=self.limit_a,
                        trimmer="target", target_share=share, when=when,
                    ),
                )  # fmt: skip
                yield item
                self.trimmed, self.watched = point.name, point
                self._trims[step.name] = Trimmed(item.id, self.section.name, self.apart, self.supply_now)
        self.trimmer, self.share = ("target" if self.trimmed in TELLS_TARGET else "unknown"), share

    def _wait(self, step: Step) -> Item:
        seconds = quantities.parse(step.seconds or "", "s")
        if step.until is None:
            return self._item(step, "wait", seconds=seconds)
        self._not_on_lamp(step, "waits for a reading")
        named = [point for name in step.points for point in self._expand(name)]
        point = named[0] if len(named) == 1 else self.watched if not step.points else None
        if point is None:
            raise self._refuse(
                step, f"waits for {len(named)} readings to come to rest", "one test point, or a clip or trim before it"
            )
        if not self.on:
            raise self._refuse(step, f"waits for {point.name} to come to rest while the supply is off")
        least_s = 0.0 if step.at_least is None else quantities.parse(step.at_least, "s")
        if least_s > seconds:
            raise self._refuse(step, f"waits at least {step.at_least} and at most {step.seconds}", "no more at least")
        limits = self._target(step, point, share=1.0, when=step.when or self.design.target.when)
        assert limits.nominal is not None
        try:
            drift = drift_per_s(step.drift, point, limits.nominal)
        except EntryError as error:
            raise self._refuse(
                step, f"lets {point.name} drift by {step.drift!r}: {error.came}", error.expected
            ) from None
        if drift > MOST_DRIFT * abs(limits.nominal) / 60.0 * (1.0 + 1e-9):
            raise self._refuse(
                step, f"lets {point.name} drift by {step.drift!r}", f"at most {MOST_DRIFT:.0%} of the target a minute"
            )
        self.soaked = True
        return self._item(
            step, "wait", seconds=seconds, point=point, limits=limits, until_settled=True, least_s=least_s,
            drift_limit=drift,
        )  # fmt: skip

    def _target(self, step: Step, point: Point, *, share: float, when: Literal["cold", "warm"] | None = None) -> Limits:
        """Limits of the target at a test point, at this place of the plan."""
        if not tells_target(point):
            raise self._refuse(
                step, f"judges {point.name} by the target", "a drop over emitter resistors, or a rail's current or drop"
            )
        tolerance = None if step.tolerance is None else quantities.parse(step.tolerance, "%") / 100.0
        rails = self.design.rails
        under = Condition(
            positive_v=self.positive_v if self.on else rails.positive_v,
            negative_v=self.negative_v if self.on else rails.negative_v,
            trimmer="target", when=when or self.design.target.when, fuse_ohm=self._fuse_ohm(step),
        )  # fmt: skip
        try:
            return target_limits(self.design, point, under, share=share, tolerance=tolerance)
        except ModelError as error:
            raise self._refuse(step, f"judges {point.name} by the target: {error.came}", error.expected) from None

    @staticmethod
    def _fuse_ohm(step: Step) -> float | None:
        return None if step.resistor is None else quantities.parse(step.resistor, "ohm")

    def _back(self, step: Step) -> str:
        """Return the trim that a check of the target leads back to; "" for none, or for a design without a trimmer."""
        if step.trim_again is None:
            return ""
        steps = [one for section in self.procedure.sections for one in section.step]
        if not any(one.kind == "trim" and one.name == step.trim_again for one in steps):
            raise self._refuse(step, f"leads back to {step.trim_again!r}", "the name of a step of the kind 'trim'")
        if self.design.spreader.trimmer is None:
            return ""
        found = self._trims.get(step.trim_again)
        if found is None:
            raise self._refuse(step, f"leads back to {step.trim_again!r}", "a trim before it")
        if found.apart and found.section != self.section.name:
            raise self._refuse(step, f"leads back to {found.item}, in a section that may be left out", "another trim")
        if found.supply != self.supply_now:
            raise self._refuse(
                step, f"leads back to {found.item}, where the supply stands otherwise", "the same rails and limit"
            )
        return found.item
