"""What has to hold on every path through a plan, whichever sections are left out.

A plan is one list of items, but a walk may leave sections out, go back to a trim, and go on at its resume point.  So
every path is followed, with what is known on it of the unit and the bench; paths on which the same is known at the
same item go on as one.

Rules
-----
* Before the first power: the limit tried into a short, at no less than the limit that power begins with (2 % are left
  to rounding); the rails read by resistance; the trimmer proven to be at its least-bias end.  Behind parts that were
  replaced the next power is a first power again, and of these only the check of the limit still stands.
* A procedure with ``unknown_trimmer`` may begin with the trimmer as it was found, with the output read by resistance
  as well.  Its first power, and any behind replaced parts, has the lowest rails and no more than the target needs.
* Where a rail in its limit doesn't end the walk, the next power is a first power again, with the trimmer proven.
* While the trimmer is anywhere, no limit is above what the target needs.
* A dummy load goes on and comes off without power, and on only behind the offset, proven at rails as high as those
  that the load will see.  Only a loaded stage is driven, or has a limit for it.  Nothing is trimmed, and nothing leads
  back to a trim, while a load is on.  What a section connects it takes off again.
"""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass, replace
from typing import Final, Literal

from benchkit import quantities
from benchkit.errors import FileError
from benchkit.procedure.file import Procedure
from benchkit.procedure.items import DRIVE_SHARES, Item
from benchkit.procedure.sizing import rails_text, supply_limit_a
from benchkit.stage.design import Design

CHECKED_WITHIN: Final = 0.02
"""How far (relative) the limit that was tried may lie below the one that power begins with; our own figure."""

ROUNDING: Final = 1.0 + 1e-9

OFFSET: Final = "offset before load"


@dataclass(frozen=True, kw_only=True)
class Known:
    """What is known on a path: of the unit, of the supply's limit, and of what hangs on the output."""

    parts: bool = False
    limited: bool = False
    semiconductors: bool = False
    checked_a: float = 0.0
    rails: bool = False
    output: bool = False
    trimmer: Literal["anywhere", "least", "proven", "set"] = "anywhere"
    powered: bool = False
    rails_v: float = 0.0
    read_v: float = 0.0
    offset_v: float = 0.0
    load: bool = False
    driven: bool = False


Node = tuple[int, Known]

CUT: Final = "cut off"
"""A step of a path that is no item's: the walk was cut off, and goes on at its resume point."""


class Paths:
    """Follows every path through a plan, and refuses the procedure where one breaks a rule.

    Parameters
    ----------
    procedure : Procedure
    design : Design
    items : tuple of Item
    resume : int
        The item's number at which a walk that was cut off goes on.
    lowest_v : tuple of float
        The lowest rails at which the stage regulates (V).
    least_a : float
        Limit for least bias (A).
    """

    def __init__(
        self,
        procedure: Procedure,
        design: Design,
        items: tuple[Item, ...],
        *,
        resume: int,
        lowest_v: tuple[float, float],
        least_a: float,
    ) -> None:
        self._procedure = procedure
        self._design = design
        self._items = items
        self._resume = resume
        self._lowest_v = lowest_v
        self._least_a = least_a
        self._number = {item.id: number for number, item in enumerate(items)}
        self._from: dict[Node, tuple[Node, str] | None] = {}

    def check(self) -> None:
        """Follow every path.

        Raises
        ------
        FileError
            At the first item that breaks a rule on some path.
        """
        waiting: deque[Node] = deque()
        cut: deque[tuple[Node, Node]] = deque()
        known_cuts: set[Node] = set()

        def reach(node: Node, origin: tuple[Node, str] | None) -> None:
            if node not in self._from:
                self._from[node] = origin
                waiting.append(node)

        reach((0, Known()), None)
        while waiting or cut:
            if not waiting:  # whole walks first, so that a refusal speaks of the plainest path
                after, node = cut.popleft()
                reach(after, (node, CUT))
                continue
            node = waiting.popleft()
            number, known = node
            if number == len(self._items):
                continue
            for after, left_out in self._after(node):
                reach(after, (node, left_out))
            # A walk that was cut off knows which parts were replaced, that a limit was reached, and nothing else.
            again = (
                self._resume, Known(parts=known.parts, semiconductors=known.semiconductors, limited=known.limited)
            )  # fmt: skip
            if again not in known_cuts:
                known_cuts.add(again)
                cut.append((again, node))

    # -- from item to item -------------------------------------------------------------------------------------

    def _after(self, node: Node) -> list[tuple[Node, str]]:
        """Return where a path goes on, each with the section that is left out on the way; "" for none."""
        number, known = node
        item = self._items[number]
        if item.limited_to and known.limited:
            return [((number + 1, known), item.section)]
        if _left_out(item, known):
            return [((self._behind_section(number), known), item.section)]
        if item.kind == "choose":
            return [((number + 1, known), ""), ((self._behind_section(number), known), item.section)]
        found = self._done(node, item)
        follows = [self._left(node, item, one) for one in found]
        if item.back:
            if known.load or known.driven:
                raise self._refuse(
                    node, item, f"leads back to {item.back} while a dummy load is on", "the load taken off before it"
                )
            follows += [(self._number[item.back], one) for one in found]
        if item.limited_to and found[0].powered:
            off = self._number[item.limited_to]
            follows += [(off, replace(one, limited=True, trimmer="anywhere", powered=False)) for one in found]
        return [(one, "") for one in follows]

    def _left(self, node: Node, item: Item, known: Known) -> Node:
        """Go on with the next item; nothing may hang on the output where a section ends."""
        number = node[0] + 1
        if number < len(self._items) and self._items[number].section == item.section:
            return number, known
        if known.load or known.driven:
            raise self._refuse(
                node,
                item,
                "ends its section with " + ("the stage driven" if known.driven else "the dummy load on"),
                "'stop driving' and 'take the dummy load off' in the section that began with them",
            )
        return number, replace(known, read_v=0.0)

    def _behind_section(self, number: int) -> int:
        section = self._items[number].section
        while number < len(self._items) and self._items[number].section == section:
            number += 1
        return number

    def _done(self, node: Node, item: Item) -> list[Known]:
        """Return what may be known once an item is done."""
        known = node[1]
        match item.kind:
            case "parts":
                other = replace(
                    known, parts=True, rails=False, output=False, trimmer="anywhere", powered=False, offset_v=0.0
                )
                return [known, other, replace(other, semiconductors=True)]
            case "measure":
                return [self._read(item, known)]
            case "rule":
                return [replace(known, offset_v=known.read_v) if item.rule == OFFSET else known]
            case "limit check":
                self._limit_for_a_load(node, item)
                return [replace(known, checked_a=item.limit_a)]
            case "lamp":
                self._first(node, item)
                return [known]
            case "supply":
                return [self._supply(node, item)]
            case "trim":
                if known.load or known.driven:
                    raise self._refuse(node, item, "trims while a dummy load is on", "the load taken off before it")
                return [replace(known, trimmer="set")]
            case "tell":
                return [self._act(node, item)]
        return [known]

    def _read(self, item: Item, known: Known) -> Known:
        name = "" if item.point is None else item.point.name
        if item.trimmer_end and known.trimmer == "least":
            return replace(known, trimmer="proven")
        if name == "output" and item.powered:
            return replace(known, read_v=known.rails_v)
        if name == "ohm.rails" and not item.may_go_on:
            return replace(known, rails=True)
        if name == "ohm.output" and not item.may_go_on:
            return replace(known, output=True)
        return known

    # -- power -------------------------------------------------------------------------------------------------

    @property
    def _has_trimmer(self) -> bool:
        return self._design.spreader.trimmer is not None

    def _supply(self, node: Node, item: Item) -> Known:
        known = node[1]
        self._limit_for_a_load(node, item)
        if not known.powered:
            self._first(node, item)
        needed_a = self._needed_a(item)
        if self._has_trimmer and known.trimmer in ("anywhere", "least") and item.limit_a > needed_a * ROUNDING:
            raise self._refuse(
                node,
                item,
                f"sets a limit of {quantities.show(item.limit_a, 'A')} while the trimmer is anywhere",
                f'limit = "for the target", {quantities.show(needed_a, "A")} here, or less',
            )
        if known.driven and item.raises:
            raise self._refuse(node, item, "raises rails or limit while the stage is driven", "'stop driving' before")
        if known.load and item.positive_v > known.offset_v * ROUNDING:
            raise self._refuse(
                node,
                item,
                f"gives a dummy load {rails_text(item.positive_v, item.negative_v)}, and the offset was proven at less",
                f"the rule {OFFSET!r} at these rails before the load",
            )
        return replace(known, powered=True, rails_v=item.positive_v)

    def _first(self, node: Node, item: Item) -> None:
        """Refuse a first power before limit, rails and trimmer have been checked on this path."""
        known, on_lamp = node[1], item.kind == "lamp"
        as_found = self._procedure.head.unknown_trimmer
        lacking = []
        if not known.checked_a and not on_lamp:
            lacking.append("a step of the kind 'limit check'")
        if not known.rails:
            lacking.append("a reading of ohm.rails")
        if as_found and not known.output and not on_lamp:
            lacking.append("a reading of ohm.output, which nobody passes without")
        untouched = not known.parts and not known.limited and known.trimmer == "anywhere"
        may_be_anywhere = as_found and not on_lamp and untouched
        if self._has_trimmer and known.trimmer != "proven" and not may_be_anywhere:
            lacking.append("a reading of ohm.spreader.ARM, which proves the trimmer's end")
        if lacking:
            raise self._refuse(
                node,
                item,
                "gives power before the unit is known to be safe for it",
                f"{' and '.join(lacking)} before it",
                "No procedure can leave these out",
            )
        if on_lamp:
            return
        if as_found or known.parts or known.limited:
            self._gently(node, item)
        if known.checked_a < (1.0 - CHECKED_WITHIN) * item.limit_a:
            raise self._refuse(
                node,
                item,
                f"begins with a limit of {quantities.show(item.limit_a, 'A')}, and "
                f"{quantities.show(known.checked_a, 'A')} was tried into the short",
                "a limit check at the limit that power begins with",
                "No procedure can leave this out",
            )

    def _gently(self, node: Node, item: Item) -> None:
        """Refuse a first power that is more than such a unit may get."""
        most_a = self._needed_a(item)
        if node[1].trimmer == "proven" or not self._has_trimmer:
            most_a = max(most_a, self._least_a)
        if item.positive_v > self._lowest_v[0] * ROUNDING or item.limit_a > most_a * ROUNDING:
            what = "whose parts were replaced" if node[1].parts else "whose trimmer stands as it was found"
            raise self._refuse(
                node,
                item,
                f"powers a unit {what}, with {rails_text(item.positive_v, item.negative_v)} and a limit of "
                f"{quantities.show(item.limit_a, 'A')}",
                'rails = "lowest" and limit = "for the target", or less',
                "No procedure can leave this out",
            )

    def _limit_for_a_load(self, node: Node, item: Item) -> None:
        if item.drive_limit and not node[1].load:
            raise self._refuse(
                node,
                item,
                f"sets a limit for a driven stage, {quantities.show(item.limit_a, 'A')}, without a dummy load on it",
                'limit = "for the target", or an act = "connect the dummy load" before it',
            )

    def _needed_a(self, item: Item) -> float:
        """What the target needs at an item's rails (A)."""
        return supply_limit_a(self._design, item.positive_v, item.negative_v, share=1.0)

    # -- what is told ------------------------------------------------------------------------------------------

    def _act(self, node: Node, item: Item) -> Known:
        known = node[1]
        if item.act == "trimmer to least":
            return replace(known, trimmer="least")
        if item.act in ("connect the dummy load", "take the dummy load off") and item.powered:
            raise self._refuse(node, item, f"says {item.act!r} while the unit has power", "off, or a clip, for it")
        if item.act == "connect the dummy load":
            if not known.offset_v:
                raise self._refuse(
                    node,
                    item,
                    "connects a dummy load before the offset has been proven",
                    f"a reading of output and the rule {OFFSET!r}, on every path to it",
                    "No procedure can leave this out",
                )
            return replace(known, load=True)
        if item.act == "take the dummy load off":
            if known.driven:
                raise self._refuse(node, item, "takes the load off a driven stage", "'stop driving' before it")
            return replace(known, load=False)
        if item.act not in DRIVE_SHARES:
            return known
        drives = DRIVE_SHARES[item.act] > 0.0
        if drives and not known.load:
            raise self._refuse(node, item, "drives a stage without a dummy load", "'connect the dummy load' before it")
        return replace(known, driven=drives)

    # -- words -------------------------------------------------------------------------------------------------

    def _refuse(self, node: Node, item: Item, came: str, expected: str, next_step: str = "") -> FileError:
        return FileError(self._procedure.file, f"step {item.id}", came + self._where(node), expected, next_step)

    def _where(self, node: Node) -> str:
        """Which path it is, in words."""
        sections: list[str] = []
        cut = ""
        origin = self._from[node]
        while origin is not None and not cut:
            before, word = origin
            if word == CUT:
                cut = ", in a walk that was cut off and goes on"
            elif word:
                sections.append(word)
            origin = self._from[before]
        named = " and ".join(dict.fromkeys(reversed(sections)))
        left_out = f" when {named} {'are' if ' and ' in named else 'is'} left out" if named else ""
        return cut + left_out + (" after parts have been replaced" if node[1].parts else "")


def _left_out(item: Item, known: Known) -> bool:
    """Whether an item's section is passed by on a path; one that is optional is chosen at its question."""
    match item.only_if:
        case "parts replaced":
            return not known.parts
        case "no parts replaced":
            return known.parts
        case "semiconductors replaced":
            return not known.semiconductors
        case "no semiconductors replaced":
            return known.semiconductors
        case "from least bias":
            return not (known.parts or known.limited)
    return False
