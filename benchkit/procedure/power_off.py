"""The items around a unit without power: rails watched down, probes clipped on, and a lamp in place of a limit.

Rules
-----
* After off each rail is watched down at the unit's own capacitors until it is low, then rail to rail: a blown fuse
  hides charge from the supply's terminals, and what lies from rail to rail is what a hand meets.
* Where much is stored (`benchkit.stage.stored`) there is a second look after a minute.
* Nothing here switches a unit that is fed through a series lamp, and its rails are whatever the lamp leaves: such a
  unit is looked at and switched off by hand.  Nothing is set, trimmed, or judged by the model on it.
"""

from __future__ import annotations

from abc import abstractmethod
from collections.abc import Iterator
from typing import Any

from benchkit import quantities
from benchkit.errors import FileError
from benchkit.judge.limits import Limits
from benchkit.procedure import questions
from benchkit.procedure.file import Section, Step
from benchkit.procedure.items import RAIL_LOW_V, RAIL_POINTS, Item, ItemKind
from benchkit.procedure.sizing import discharge_text, helper_text, time_text
from benchkit.stage.design import Design
from benchkit.stage.points import Point
from benchkit.stage.stored import SECOND_LOOK_S, Stored, stored

MAINS = (
    "Mains voltage inside: touch nothing, one hand away, somebody within call. The protective earth stays connected. "
    "Know where the lamp's switch is before it goes on."
)
"""What is to be known before mains goes on through the lamp; common practice."""

SEEN_LOW = "Nobody touches the circuit before every rail has been seen low."


class PowerOff:
    """A part of the planner; what it stands on is the planner's."""

    design: Design
    points: dict[str, Point]
    section: Section
    positive_v: float
    negative_v: float
    limit_a: float
    on: bool
    lamp: bool
    ready_hold: bool
    watched: Point | None = None

    @abstractmethod
    def _item(self, step: Step, kind: ItemKind, suffix: str = "", **more: Any) -> Item: ...

    @abstractmethod
    def _refuse(self, step: Step, came: str, expected: str = "") -> FileError: ...

    @abstractmethod
    def _expand(self, name: str) -> tuple[Point, ...]: ...

    @abstractmethod
    def _power(
        self, step: Step, suffix: str, positive_v: float, negative_v: float, limit_a: float, ramp_s: float
    ) -> Iterator[Item]: ...

    def _off(self) -> None:
        self.on = self.lamp = False

    # -- discharge ---------------------------------------------------------------------------------------------

    def _discharge(self, step: Step) -> Iterator[Item]:
        if self.on:
            raise self._refuse(
                step, "watches the rails down while the supply is on", "a step of the kind 'off' before it"
            )
        rails = self.design.rails
        yield from self._rails_down(
            step, stored(self.design, rails.positive_v, rails.negative_v), may_go_on=step.override
        )

    def _rails_down(self, step: Step, held: Stored, *, may_go_on: bool, clip: bool = False) -> Iterator[Item]:
        """Watch every rail down, then rail to rail; a second look where much was stored."""
        names = [name for name in RAIL_POINTS if name in self.points]
        for name in names:
            yield self._fall(step, name, held, f".{name}", may_go_on=may_go_on, clip=clip)
        if not held.second_look:
            return
        yield self._item(
            step,
            "wait",
            ".minute",
            title="A minute before the second look",
            do="Hands off. Large capacitors recover a little after they have been emptied.",
            why=_why_second(held),
            caution="",
            seconds=SECOND_LOOK_S,
        )
        for name in (name for name in names if name != "rails"):
            yield self._fall(step, name, held, f".second.{name}", may_go_on=may_go_on, clip=clip, second=True)

    def _fall(
        self, step: Step, name: str, held: Stored, suffix: str, *, may_go_on: bool, clip: bool, second: bool = False
    ) -> Item:
        across = name == "rails"
        low_v = 2.0 * RAIL_LOW_V if across else RAIL_LOW_V
        from_v = held.span_v if across else held.positive_v if name == "rail+" else -held.negative_v
        seconds = held.fall_s(from_v, low_v)
        where = "One tip on either rail" if across else "One tip on the rail, the other on 0 V"
        more: dict[str, Any] = {}
        if clip or not step.do:
            more["do"] = f"{where}, at the unit's own capacitors. Keep it there until the rail is low."
        if clip or not step.why:
            more["why"] = SEEN_LOW
        if clip or not step.caution:
            more["caution"] = (
                f"Never a short. If it doesn't fall: {helper_text(self.design, held.positive_v, held.negative_v)}."
            )
        if not held.farad:
            more.pop("caution", None)
        look = "Second look" if second else "Seen low at the unit"
        time = "at once" if seconds == 0.0 else f"in {time_text(seconds)}" if seconds is not None else ""
        expected = f"falls from at most {quantities.show(from_v, 'V', 3)} {time}".rstrip() if not second else ""
        return self._item(
            step,
            "discharge",
            suffix,
            title=f"{look}: {'rail to rail' if across else name}",
            point=self.points[name],
            limits=Limits(-low_v, low_v, None, "V", "common practice"),
            expected=expected,
            falls=held,
            may_go_on=may_go_on,
            **more,
        )

    # -- clips -------------------------------------------------------------------------------------------------

    def _clip(self, step: Step) -> Iterator[Item]:
        self._not_on_lamp(step, "clips the probes and gives power again")
        back = (self.positive_v, self.negative_v, self.limit_a)
        was_on = self.on
        points = tuple(point for name in step.points for point in self._expand(name))
        if len(points) != 1:
            raise self._refuse(step, f"clips the probes to {len(points)} points of {self.design.name}, not to one")
        (point,) = points
        if was_on:
            self._off()
            yield self._item(
                step,
                "off",
                ".off",
                title="Power off for the clips",
                do="The supply is switched off and read back.",
                why=f"Then the rails fall: {discharge_text(self.design, back[0], back[1])}.",
            )
            yield from self._rails_down(step, stored(self.design, back[0], back[1]), may_go_on=False, clip=True)
        yield self._item(step, "tell", ".clip", point=point, act=step.act or "")
        self.watched = point
        if was_on:
            self.ready_hold = False
            yield from self._power(step, ".again", *back, ramp_s=3.0)

    # -- the series lamp ---------------------------------------------------------------------------------------

    def _series_lamp(self, step: Step) -> Iterator[Item]:
        if self.on:
            raise self._refuse(
                step, "goes on the series lamp while the unit has power", "a step of the kind 'off' before it"
            )
        if not self.ready_hold:
            yield self._item(
                step,
                "hold",
                ".hold",
                title="Mains through the series lamp?",
                do="Series lamp switched off, unit plugged in through it, hands off. Power comes on by your own hand.",
                why="Behind this yes you switch mains on: from then on the unit's own wiring carries it.",
                caution=f"{MAINS} {questions.BY_HAND_ALWAYS}",
            )
        self.on = self.lamp = True
        self.positive_v = self.negative_v = self.limit_a = 0.0
        yield self._item(step, "lamp", raises=True, may_go_on=False, powered=True)

    def _not_on_lamp(self, step: Step, what: str) -> None:
        if self.lamp:
            raise self._refuse(
                step,
                f"{what} while the unit is fed through a series lamp: what the lamp drops moves with the current, so "
                "that rails and bias are not those of the unit without it",
                "readings with limits of their own, looks and questions, and a step of the kind 'off'",
            )


def _why_second(held: Stored) -> str:
    hold = f"{held.joule:.2g} J" if held.joule >= 0.1 else f"{1000.0 * held.joule:.2g} mJ"
    return f"The rails held {hold}, {quantities.show(held.span_v, 'V', 3)} from end to end."
