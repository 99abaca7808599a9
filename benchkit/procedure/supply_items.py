"""The items that move a supply: rails, limits, and the limit tried into a short.

Rules
-----
* A hold point stands before every item that raises a voltage or the limit; where the file has none, it is put in.
* Rails never go above the design's, a limit never above twice what the target needs; a driven stage has limits of its
  own (`benchkit.procedure.sizing`), and only behind its dummy load (`benchkit.procedure.paths`).
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from typing import Any

from benchkit import quantities
from benchkit.judge.limits import Limits
from benchkit.procedure.file import Step
from benchkit.procedure.items import DRIVE_SHARES, Item
from benchkit.procedure.power_off import PowerOff
from benchkit.procedure.sizing import charging_s, drive_limit_a, rails_text, supply_limit_a

LEAST_ROOM = 1.2
"""The first limit leaves so much room above the largest draw among some drawn units (our own figure)."""

DRIVE_LIMITS: Mapping[str, str] = {
    "for the drive": "drive the stage",
    "for the power soak": "drive at a third of full power",
}
"""Limits of a driven stage, and the acts that they are for."""


class SupplyItems(PowerOff):
    """A part of the planner; what it stands on is the planner's."""

    lowest: tuple[float, float]
    least_share: float
    least_draw_a: float
    drive_limit: bool = False
    checked_a: float = 0.0

    def _supply(self, step: Step) -> Iterator[Item]:
        self._not_on_lamp(step, "sets a supply")
        positive_v, negative_v = self._rails(step)
        limit_a = self._limit(step, positive_v, negative_v)
        if self.on and (positive_v, negative_v) == (self.positive_v, self.negative_v) and limit_a == self.limit_a:
            return
        if self.on and positive_v < self.positive_v == self.lowest[0]:
            return  # on the way up: the lowest rails at which this stage regulates are above this step already
        self.drive_limit = step.limit in DRIVE_LIMITS
        yield from self._power(step, "", positive_v, negative_v, limit_a, quantities.parse(step.ramp or "1 s", "s"))

    def _power(
        self, step: Step, suffix: str, positive_v: float, negative_v: float, limit_a: float, ramp_s: float
    ) -> Iterator[Item]:
        raises = not self.on or positive_v > self.positive_v or negative_v < self.negative_v or limit_a > self.limit_a
        words = {"positive_v": positive_v, "negative_v": negative_v, "limit_a": limit_a}
        if raises and not self.ready_hold:
            rails = rails_text(positive_v, negative_v)
            title = f"Power on again, {rails}?" if suffix else f"Go to {rails}?"
            if self.on and (positive_v, negative_v) == (self.positive_v, self.negative_v):
                title = f"Raise the limit to {quantities.show(limit_a, 'A')}?"
            yield self._item(
                step,
                "hold",
                f"{suffix}.hold",
                title=title,
                do=f"Rails {rails}, limit {quantities.show(limit_a, 'A')}. Hands off the circuit; watch the current.",
                why="Voltage and limit rise only after a plain yes.",
            )
        rise_v = positive_v - (self.positive_v if self.on else 0.0)
        self.positive_v, self.negative_v, self.limit_a, self.on = positive_v, negative_v, limit_a, True
        yield self._item(
            step,
            "supply",
            f"{suffix}.power" if suffix else "",
            ramp_s=max(ramp_s, charging_s(self.design, rise_v, limit_a)),
            settle_s=max(0.5, self.design.feed.settles_after_s or 0.0),
            raises=raises,
            drive_limit=self.drive_limit,
            **({"title": f"Rails at {rails_text(positive_v, negative_v)} again"} if suffix else {}),
            may_go_on=False,
            **words,
        )

    def _limit_check(self, step: Step) -> Iterator[Item]:
        self._not_on_lamp(step, "tries the limit")
        if self.on:
            raise self._refuse(step, "tries the limit while the unit has power")
        positive_v, negative_v = self._rails(step)
        full = self.design.rails
        limit_a = self._limit(step, full.positive_v, full.negative_v)  # the highest that a walk sets without a load
        self.checked_a = limit_a
        words: dict[str, Any] = {"positive_v": positive_v, "negative_v": negative_v, "limit_a": limit_a}
        yield self._item(
            step, "hold", ".hold", title="Try the limit?", why="Current flows into the short from here.", **words
        )
        limits = Limits(0.9 * limit_a, 1.1 * limit_a, limit_a, "A", "the limit that was set, ±10 % (common practice)")
        yield self._item(
            step, "limit check", "", limits=limits, raises=True, drive_limit=step.limit in DRIVE_LIMITS,
            may_go_on=False, powered=True, **words,
        )  # fmt: skip
        yield self._item(
            step, "off", ".off", title="Supply off again", do="The supply is switched off before the unit is connected."
        )

    def _rails(self, step: Step) -> tuple[float, float]:
        rails = self.design.rails
        text = (step.rails or "").strip()
        if text == "lowest":
            return self.lowest
        if text == "full":
            return rails.positive_v, rails.negative_v
        if text.endswith("%"):
            share = quantities.parse(text, "%") / 100.0
            return share * rails.positive_v, share * rails.negative_v
        volts = quantities.parse(text, "V")
        most_v = min(rails.positive_v, -rails.negative_v or rails.positive_v)
        if volts > most_v:
            full = rails_text(rails.positive_v, rails.negative_v)
            raise self._refuse(step, f"sets the rails to {text}", f"no more than the design's {full}")
        return volts, -volts if rails.negative_v else 0.0

    def _limit(self, step: Step, positive_v: float, negative_v: float) -> float:
        full = self.design.rails
        if step.limit == "for least bias":
            return self.least_bias_limit_a()
        if step.limit == "for the target":
            return supply_limit_a(self.design, positive_v, negative_v, share=1.0)
        if step.limit is not None and step.limit in DRIVE_LIMITS:
            return drive_limit_a(self.design, DRIVE_SHARES[DRIVE_LIMITS[step.limit]])
        limit_a = quantities.parse(step.limit or "", "A")
        most_a = 2.0 * supply_limit_a(self.design, full.positive_v, full.negative_v, share=1.0)
        if limit_a > most_a:
            most = quantities.show(most_a, "A", 3)
            raise self._refuse(step, f"sets a limit of {step.limit}", f"{most} or less, twice what the target needs")
        return limit_a

    def least_bias_limit_a(self) -> float:
        """Limit (A) of the first power-on: output pairs draw something at least bias; without a trimmer, all of it."""
        full = self.design.rails
        by_rule_a = supply_limit_a(self.design, full.positive_v, full.negative_v, share=self.least_share)
        return max(by_rule_a, math.ceil(LEAST_ROOM * self.least_draw_a / 0.005 - 1e-9) * 0.005)
