"""What the model says of this very unit: narrowed limits, suspects.

Everything here blocks for up to some seconds and touches nothing but its arguments; the session runs it in threads,
aside.  Whatever goes wrong in here is said in words: a walk never ends because the model had no answer.
"""

from __future__ import annotations

import math
import time
from collections.abc import Sequence
from typing import TYPE_CHECKING

from benchkit.errors import BenchkitError
from benchkit.events import Narrowed, NarrowedLimits, ProbeNamed, Suspected, SuspectEvidence, SuspectNamed
from benchkit.procedure.actions import Narrow, Suspect, Target
from benchkit.procedure.closing import HEALTHY
from benchkit.stage.design import Design

if TYPE_CHECKING:
    from benchkit.stage.narrowing import Narrowing
    from benchkit.stage.suspects import Suspect as Found
    from benchkit.stage.suspects import Suspicion

MOST_SUSPECTS = 4
"""So many suspects go into the record, and healthy where it is not among them."""

MOST_EVIDENCE = 4
"""So many readings that speak for a suspect go into the record."""

MOST_WEIGHT = 1000.0
"""Nats at which a weight is cut: an overload where none is possible would weigh without end."""


class Narrower:
    """The model's ensembles for one design, made when they are first wanted and kept.

    Parameters
    ----------
    design : Design
    units : int or None
        How many units are drawn; None for the model's own choice.
    seed : int
    """

    def __init__(self, design: Design, units: int | None, seed: int) -> None:
        self._design, self._units, self._seed = design, units, seed
        self._narrowing: Narrowing | None = None

    def narrow(self, action: Narrow, targets: Sequence[Target]) -> Narrowed:
        """Work out the limits of `targets` for a unit of which `action.known` has been read."""
        started = time.perf_counter()
        limits: tuple[NarrowedLimits, ...] = ()
        problem = ""
        try:
            if self._narrowing is None:
                from benchkit.stage.expected import DEFAULT_UNITS
                from benchkit.stage.narrowing import Narrowing

                self._units = self._units or DEFAULT_UNITS
                self._narrowing = Narrowing(self._design, self._units, self._seed)
            found = self._narrowing.limits(action.known, [(target.conditions, target.point) for target in targets])
            limits = tuple(
                NarrowedLimits(
                    point=target.point,
                    condition=target.key,
                    unit=target.unit,
                    low=_open(one.low) if one.narrowed else None,
                    high=_open(one.high) if one.narrowed else None,
                )
                for target, one in zip(targets, found, strict=True)
            )
        except Exception as error:
            problem = words_of(error)
        return Narrowed(
            item=action.item,
            after=action.after,
            limits=limits,
            readings=len(action.known),
            units=self._units or 0,
            seed=self._seed,
            seconds=time.perf_counter() - started,
            problem=problem,
        )


def suspect(design: Design, action: Suspect) -> Suspected:
    """Work out what would explain a unit's readings, and which reading would tell most."""
    started = time.perf_counter()
    try:
        from benchkit.stage.suspects import suspect as suspects_of

        candidates = [(target.conditions, target.point) for target in action.candidates]
        return _told(design, action, suspects_of(design, action.known, candidates=candidates))
    except Exception as error:
        return Suspected(
            item=action.item,
            after=action.after,
            readings=len(action.known),
            seconds=time.perf_counter() - started,
            problem=words_of(error),
        )


def words_of(error: Exception) -> str:
    """Say why the model had no answer."""
    return str(error) if isinstance(error, BenchkitError) else f"it made an error of its own, {type(error).__name__}"


def _told(design: Design, action: Suspect, suspicion: Suspicion) -> Suspected:
    from benchkit.stage import faults
    from benchkit.stage.points import points_of

    def name(fault: faults.Fault) -> str:
        return HEALTHY if fault == faults.HEALTHY else str(fault)

    units = {point.name: point.unit for point in points_of(design)}
    names = {**{target.conditions: target.key for target in action.candidates}, **dict(action.names)}
    chosen = list(suspicion.suspects[:MOST_SUSPECTS])
    chosen += [one for one in suspicion.suspects[MOST_SUSPECTS:] if one.fault == faults.HEALTHY]

    def named(found: Found) -> SuspectNamed:
        telling = sorted(found.evidence, key=lambda one: -one.weight)[:MOST_EVIDENCE]
        return SuspectNamed(
            fault=name(found.fault),
            probability=found.probability,
            alike=tuple(name(fault) for fault in found.alike),
            evidence=tuple(
                SuspectEvidence(
                    point=one.point,
                    condition=names.get(one.conditions, ""),
                    unit=units.get(one.point, ""),
                    read=_open(one.read),
                    expected=_open(one.expected),
                    healthy=_open(one.healthy),
                    weight=min(max(one.weight, -MOST_WEIGHT), MOST_WEIGHT),
                )
                for one in telling
            ),
        )

    return Suspected(
        item=action.item,
        after=action.after,
        suspects=tuple(named(one) for one in chosen),
        probe_next=tuple(
            ProbeNamed(
                point=probe.point, condition=names.get(probe.conditions, ""), gain_bits=probe.gain_bits, why=probe.why
            )
            for probe in suspicion.probe_next
        ),
        unseen_count=len(suspicion.unseen),
        unseen=tuple(name(fault) for fault in suspicion.unseen),
        hypotheses=suspicion.hypotheses,
        readings=len(action.known),
        unsolved=tuple(name(fault) for fault in suspicion.unsolved),
        seconds=suspicion.seconds,
        explained=suspicion.explained,
    )


def _open(value: float) -> float | None:
    """Turn a number that is not finite (a limit that stays open, an overload) into None."""
    return float(value) if math.isfinite(value) else None
