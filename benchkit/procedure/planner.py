"""Follows a procedure step by step and makes the items of a design's plan; see `benchkit.procedure.plan`."""

from __future__ import annotations

import math
import re
from collections.abc import Iterator, Mapping
from dataclasses import replace
from typing import Any, Literal

from benchkit import quantities
from benchkit.errors import EntryError, FileError
from benchkit.judge.limits import Limits
from benchkit.judge.rules import find_rule
from benchkit.procedure.bias_items import BiasItems
from benchkit.procedure.file import PairText, Procedure, Section, Step
from benchkit.procedure.items import (
    MOST_OFFSET_V,
    NEVER_PASSED_OVER,
    AnyCondition,
    Item,
    ItemKind,
    Joined,
)
from benchkit.procedure.sizing import (
    capacitors_settle_s,
    with_room,
)
from benchkit.procedure.supply_items import SupplyItems
from benchkit.procedure.wording import fill, words_of
from benchkit.stage.conditions import Condition, Unpowered
from benchkit.stage.design import Design
from benchkit.stage.points import Point, points_of
from benchkit.stage.reach import least_regulating_rails
from benchkit.stage.trimmer import least_draw_a, least_share


class Planner(SupplyItems, BiasItems):
    """Follows rails, limit, trimmer and warmth from step to step."""

    def __init__(self, procedure: Procedure, design: Design) -> None:
        super().__init__()
        self.procedure = procedure
        self.design = design
        self.points = {point.name: point for point in points_of(design)}
        self.positive_v = self.negative_v = self.limit_a = 0.0
        self.on = self.lamp = False
        self.trimmer: Literal["least", "target", "unknown"] = "unknown"
        self.share = 1.0
        self.lowest = with_room(design, least_regulating_rails(design))
        self.least_share = least_share(design)
        self.least_draw_a = least_draw_a(design)
        self.section: Section
        self.ready_hold = False
        self.firm = NEVER_PASSED_OVER | ({"ohm.output"} if procedure.head.unknown_trimmer else set())

    def items(self) -> Iterator[Item]:
        """Yield the items in their order, the bench's first."""
        yield Item(
            id="bench",
            section=self.procedure.sections[0].name,
            section_title=self.procedure.sections[0].title,
            kind="connect",
            title="Find the bench",
            do="The instruments are being asked who they are.",
            may_go_on=False,
        )
        for section in self.procedure.sections:
            self.section = section
            self.run: list[Item] = []
            first = True
            limited_to = "" if section.at_limit is None else f"{section.name}.{section.at_limit}"
            for item in self._section(section):
                limited_to = "" if item.id == limited_to else limited_to
                yield replace(
                    item,
                    limited_to=limited_to,
                    resume=section.resume and first,
                    only_if=section.only_if or "",
                    optional=bool(section.optional),
                    marked=section.as_ or "",
                )
                first = False
                self.run = [*self.run, item] if item.kind == "measure" else self.run if item.kind == "rule" else []
                self.ready_hold = item.kind == "hold"

    def _section(self, section: Section) -> Iterator[Item]:
        steps = tuple(filter(self._makes_sense, section.step))
        self.apart = section.only_if is not None or bool(section.optional)
        if not self.apart:
            for step in steps:
                yield from self._step(step)
            return
        if not steps:
            return
        supply, trimmer, watched, self.ready_hold = self.supply_now, self.trimmer, self.watched, False
        if section.optional:
            yield Item(
                id=f"{section.name}.choose",
                section=section.name,
                section_title=section.title,
                kind="choose",
                title=section.title,
                do=fill(section.optional, self.words({})),
                why="It can be left out: the record then says that it was.",
                powered=self.on,
            )
        for step in steps:
            yield from self._step(step)
        if self.supply_now != supply:
            raise self._refuse(
                steps[-1],
                "leaves the supply otherwise than it was before the section, which may be left out",
                "the same rails and the same limit, or off",
            )
        self.ready_hold = False
        if self.trimmer != trimmer:
            self.trimmer = "unknown"
        if self.watched != watched:
            self.watched = None

    def _step(self, step: Step) -> Iterator[Item]:
        match step.kind:
            case "tell" | "confirm" | "text" | "hold":
                if step.act == "trimmer to least":
                    self.trimmer = "least"
                yield self._item(step, step.kind, act=step.act or "")
            case "measure":
                yield from self._measure(step)
            case "rule":
                self._not_on_lamp(step, "judges a rule")
                if self._rule_fits(step):
                    may_go_on = step.override and step.rule not in NEVER_PASSED_OVER
                    number, retake = self._number(step), self._retake(step.rule or "")
                    yield self._item(
                        step, "rule", rule=step.rule or "", number=number, may_go_on=may_go_on, retake=retake
                    )
            case "supply":
                yield from self._supply(step)
            case "limit check":
                yield from self._limit_check(step)
            case "trim":
                yield from self._trim(step)
            case "wait":
                yield self._wait(step)
            case "parts replaced":
                if self.on:
                    raise self._refuse(
                        step, "asks for parts that were replaced while the supply is on", "off before it"
                    )
                yield self._item(step, "parts")
            case "clip":
                yield from self._clip(step)
            case "off":
                self._off()
                yield self._item(step, "off")
            case "discharge":
                yield from self._discharge(step)
            case "series lamp":
                yield from self._series_lamp(step)

    def _makes_sense(self, step: Step) -> bool:
        """Whether a step means anything for this design."""
        trims = step.kind == "trim" or step.act == "trimmer to least" or step.needs == "a trimmer"
        if trims and self.design.spreader.trimmer is None:
            return False
        return step.needs != ("two rails" if self.design.single_supply else "one rail")

    def _item(self, step: Step, kind: ItemKind, suffix: str = "", **more: Any) -> Item:
        words = self.words(more)
        item = Item(
            id=f"{self.section.name}.{step.name}{suffix}",
            section=self.section.name,
            section_title=self.section.title,
            kind=kind,
            title=fill(step.title, words),
            do=fill(step.do, words),
            why=fill(step.why, words),
            caution=fill(step.caution, words),
            expected=fill(step.expected, words),
            may_go_on=step.override,
            powered=self.on,
        )
        return replace(item, **more)

    def _measure(self, step: Step) -> Iterator[Item]:
        if not isinstance(step.limits, PairText):
            self._not_on_lamp(step, "judges readings by the model or the target")
        for name in step.points:
            for point in self._expand(name):
                yield self._reading(step, point)

    def _reading(self, step: Step, point: Point) -> Item:
        limits: Limits | None = None
        condition: AnyCondition | None = None
        held_under: AnyCondition | None = None
        trimmer_end = self.trimmer == "least" and point.name in {one.name for one in self._expand("ohm.spreader.ARM")}
        firm = trimmer_end or point.name in self.firm
        widened = step.acceptance == "guarded rejection" and not trimmer_end
        if firm and (step.limits != "the model" or step.allow is not None or widened):
            raise self._refuse(step, f"judges {point.name} by limits of its own", "the model's limits, as they are")
        if isinstance(step.limits, PairText):
            limits = self._stated(step, step.limits, point)
        elif step.state == "driven":
            raise self._refuse(step, "judges a driven stage by the model or the target", "stated limits")
        elif step.limits == "the target":
            limits = self._target(step, point, share=1.0, when=step.when)
            if self.on and self.trimmer == "target" and point.name == self.trimmed:
                held_under = self._powered_condition(step)
        elif point.powered:
            if not self.on:
                raise self._refuse(step, f"reads {point.name} against the model while the supply is off")
            condition = self._powered_condition(step)
            if self.trimmer == "target" and point.name == self.trimmed:
                held_under, condition, limits = condition, None, self._target(step, point, share=self.share)
        else:
            if self.on:
                raise self._refuse(step, f"reads {point.name} while the supply is on")
            condition = Unpowered(point=point.name, trimmer=self.trimmer)
        return self._item(
            step,
            "measure",
            f".{point.name}",
            title=f"{fill(step.title, self.words({}))}: {point.name}",
            point=point,
            condition=condition,
            held_under=held_under,
            told_under=self._told_under() if self.soaked and (condition or held_under) and point.powered else None,
            limits=limits,
            samples=step.samples,
            settle_s=self._settle_s(step),
            acceptance=step.acceptance,
            allow=self._allow(step, point),
            trimmer_end=trimmer_end,
            driven=step.state == "driven",
            back=self._back(step),
            may_go_on=step.override and not firm,
        )

    def _stated(self, step: Step, pair: PairText, point: Point) -> Limits:
        try:
            low = None if pair.low is None else quantities.parse(pair.low, point.unit)
            high = None if pair.high is None else quantities.parse(pair.high, point.unit)
            return Limits(low, high, None, point.unit, "stated in the procedure")
        except (EntryError, ValueError) as error:
            raise self._refuse(step, f"states limits for {point.name} that can't be used: {error}") from None

    def _allow(self, step: Step, point: Point) -> float:
        if step.allow is None:
            return 0.0
        try:
            allow = quantities.parse(step.allow, point.unit)
        except EntryError as error:
            raise self._refuse(step, f"allows {step.allow!r} at {point.name}: {error.came}", error.expected) from None
        if allow < 0.0:
            raise self._refuse(step, f"allows {step.allow!r} at {point.name}", "zero or more")
        return allow

    def _powered_condition(self, step: Step) -> Joined | Condition:
        cold = Condition(
            positive_v=self.positive_v, negative_v=self.negative_v, limit_a=self.limit_a, trimmer=self.trimmer,
            fuse_ohm=self._fuse_ohm(step),
        )  # fmt: skip
        if self.trimmer == "target":
            around = self.design.target.tolerance
            shares = (self.share, self.share * (1.0 - around), self.share * (1.0 + around))
            when = step.when or "warm"
            trimmed = tuple(replace(cold, target_share=share, when=when) for share in shares)
            if step.when is None and self.soaked:
                as_cold = tuple(replace(one, when="cold") for one in trimmed[1:])
                return Joined(conditions=(*trimmed, *as_cold), words=f"±{around:.0%}, cold to warm")
            return Joined(conditions=trimmed, words=f"±{around:.0%}, {when}")
        warm = replace(cold, when="warm")
        if step.when is not None:
            return warm if step.when == "warm" else cold
        return Joined(conditions=(cold, warm), words="cold to warm")

    def _told_under(self) -> Joined:
        """What the model takes a reading to be made under once the stage's reading has come to rest."""
        cold = Condition(positive_v=self.positive_v, negative_v=self.negative_v, limit_a=self.limit_a)
        return Joined(conditions=(cold, replace(cold, when="warm")), words="cold to warm")

    def _settle_s(self, step: Step) -> float:
        if step.settle is None:
            return 0.0
        if step.settle != "the capacitors":
            return quantities.parse(step.settle, "s")
        return capacitors_settle_s(self.design)

    def _expand(self, name: str) -> tuple[Point, ...]:
        trimmer = self.design.spreader.trimmer
        if "ARM" in name:
            if trimmer is None:
                return ()
            name = name.replace("ARM", "lower" if trimmer.arm == "between" else trimmer.arm)
        if "N" not in name and "PART" not in name:
            return (self.points[name],) if name in self.points else ()
        pattern = re.escape(name).replace("PART", r"[a-z.0-9]+").replace("N", r"\d+")
        return tuple(point for point in self.points.values() if re.fullmatch(pattern, point.name))

    def _rule_fits(self, step: Step) -> bool:
        if step.rule == "feed symmetry":
            return "feed.upper" in self.points and "feed.lower" in self.points
        if step.rule == "fail-safe trimmer":
            return self.design.spreader.trimmer is not None
        return True

    def _retake(self, rule: str) -> tuple[str, ...]:
        """Find those of the readings just before a rule that it judges; nothing has moved since.

        Not the one that the clips were on while another was read: they would go back there under power.
        """
        needs = find_rule(rule).needs(self.design)
        clipped = "" if self.watched is None else self.watched.name
        read = [(item, item.point) for item in self.run if item.point is not None]
        moved = any(point.name != clipped and point.function != "dc current" for _, point in read)
        if moved:
            read = [(item, point) for item, point in read if point.name != clipped]
        return tuple(item.id for item, point in read if point.name in needs and not item.driven)

    def _number(self, step: Step) -> float | None:
        if step.number is None:
            return None
        text = step.number.rstrip()
        try:
            for unit, scale in (("%", 0.01), ("V", 1.0)):
                if text.endswith(unit):
                    number = quantities.parse(text, unit) * scale
                    break
            else:
                number = float(text)
        except (EntryError, ValueError):
            number = math.nan
        if step.rule in NEVER_PASSED_OVER and number > MOST_OFFSET_V:
            raise self._refuse(step, f"allows an offset of {text}", f"{MOST_OFFSET_V * 1e3:.0f} mV or less")
        if not (math.isfinite(number) and number > 0.0):
            raise self._refuse(step, f"has the number {step.number!r}", "a number above zero, such as 10, 1 % or 50 mV")
        return number

    def words(self, given: Mapping[str, Any]) -> dict[str, str]:
        """What the words in braces stand for at this place of the plan; without power, what power begins with."""
        rails = (self.positive_v, self.negative_v) if self.on else self.lowest
        positive_v, negative_v = float(given.get("positive_v", rails[0])), float(given.get("negative_v", rails[1]))
        now_a = self.limit_a if self.on else 0.0
        limit_a = float(given.get("limit_a", now_a)) or self.checked_a or self.least_bias_limit_a()
        return words_of(self.design, positive_v, negative_v, limit_a)

    def _refuse(self, step: Step, came: str, expected: str = "") -> FileError:
        return FileError(self.procedure.file, f"section {self.section.name}, step {step.name}", came, expected)
