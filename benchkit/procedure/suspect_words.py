"""Suspects in plain words, for screens, plain lines and records.

A healthy unit never sounds proven: whatever is said of it names what the readings could not have shown.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final

from benchkit import quantities
from benchkit.events import ProbeNamed, Suspected, SuspectEvidence, SuspectNamed
from benchkit.procedure.closing import HEALTHY

SHOWN: Final = 3
"""Suspects that are shown at a time."""

MOST_EVIDENCE: Final = 2
"""Readings that are shown to speak for one suspect."""

LEAST_SHARE: Final = 0.005
"""A suspect with less than this of the probability is not worth a line."""


def fault_words(fault: str) -> str:
    """Return a fault as it is said.

    Examples
    --------
    >>> fault_words("emitter.upper.1: open")
    'emitter.upper.1 open'
    >>> fault_words("healthy")
    'no single fault'
    """
    return "no single fault" if fault == HEALTHY else fault.replace(": ", " ", 1)


def chance_words(probability: float) -> str:
    """Return a probability in per cent, never as certain as 0 or 100.

    Examples
    --------
    >>> chance_words(0.634), chance_words(0.9999), chance_words(0.0002)
    ('63 %', 'over 99 %', 'under 1 %')
    """
    if probability > 0.99:
        return "over 99 %"
    return "under 1 %" if probability < 0.01 else f"{probability * 100:.0f} %"


def evidence_words(evidence: SuspectEvidence) -> str:
    """Return what was read, what the suspect would lead to, and what a healthy unit would."""
    read, expected, healthy = (
        _value(value, evidence.unit) for value in (evidence.read, evidence.expected, evidence.healthy)
    )
    return f"{evidence.point} reads {read}, expected {expected}; healthy would read {healthy}"


def _value(value: float | None, unit: str) -> str:
    return "overload" if value is None else quantities.show(value, unit)


def alike_words(suspect: SuspectNamed, among: Sequence[SuspectNamed] = ()) -> str:
    """Name the faults that these readings can't tell from the suspect, with their chances where `among` has them."""
    known = {one.fault: one.probability for one in among}
    if not suspect.alike:
        return ""
    ordered = sorted(suspect.alike, key=lambda fault: -known.get(fault, 0.0))
    chances = {fault: f" ({chance_words(chance)})" for fault, chance in known.items()}
    return "or " + " or ".join(fault_words(fault) + chances.get(fault, "") for fault in ordered)


def evidence_for(suspect: SuspectNamed) -> tuple[str, ...]:
    """Return the readings that speak most for a suspect, in words."""
    telling = sorted((one for one in suspect.evidence if one.weight > 0.0), key=lambda one: -one.weight)
    return tuple(evidence_words(one) for one in telling[:MOST_EVIDENCE])


def shown_suspects(suspected: Suspected) -> tuple[SuspectNamed, ...]:
    """Return the few suspects that are worth a line; one that was named with an earlier one needs none of its own."""
    shown: list[SuspectNamed] = []
    named: set[str] = set()
    for one in suspected.suspects:
        if one.probability >= LEAST_SHARE and one.fault not in named and len(shown) < SHOWN:
            shown.append(one)
            named.update(one.alike)
    return tuple(shown) or suspected.suspects[:1]


def heading_words(suspected: Suspected) -> str:
    """Return the answer in one sentence."""
    if suspected.problem:
        return f"The model has no answer about suspects: {suspected.problem}"
    if not suspected.suspects:
        return "The model has no answer about suspects."
    first = suspected.suspects[0]
    readings = f"{suspected.readings} reading" + ("" if suspected.readings == 1 else "s")
    if not suspected.explained:
        return (
            f"Nothing that the model knows explains the {readings}, neither a single fault nor none: look for more "
            f"than one fault, or for a probe in the wrong place. It comes nearest with {fault_words(first.fault)}, "
            "which does not fit either."
        )
    if first.fault == HEALTHY:
        return (
            f"No single fault explains the {readings} better than chance does ({chance_words(first.probability)}). "
            "That proves nothing healthy."
        )
    return f"{suspected.hypotheses} explanations of {readings}, likeliest first: {fault_words(first.fault)}."


def unseen_words(suspected: Suspected, names: int = 0) -> str:
    """Say how many faults could not have shown, with the first few of their names; "" when nothing is to be said.

    Those that the lines of the suspects name already, as suspects or as alike to one, are not named again.
    """
    if suspected.problem or not suspected.suspects:
        return ""
    if not suspected.unseen_count:
        return "Each fault that the model knows would have shown; faults that it doesn't know may still be there."
    said = {fault for one in shown_suspects(suspected) for fault in (one.fault, *one.alike)}
    unseen = [fault for fault in suspected.unseen if fault not in said]
    count = suspected.unseen_count - (len(suspected.unseen) - len(unseen))
    if not count:
        return (
            "Each fault that isn't named here would have shown; faults that the model doesn't know may still be there."
        )
    which = ", ".join(fault_words(fault) for fault in unseen[:names])
    more = "" if count <= names else ", and more"
    listed = f": {which}{more}" if which else ""
    others = "" if count == suspected.unseen_count else "more " if count > 1 else "other "
    return f"{count} {others}fault{'' if count == 1 else 's'} could not have shown yet{listed}."


def probe_words(probe: ProbeNamed, *, now: bool) -> str:
    """Say which reading would tell most, and whether it can be taken as things stand."""
    where = f"Most telling next: {probe.point} ({probe.condition})"
    if not now:
        where += "; make safe first, it is offered once the rails have been seen low"
    return f"{where}. {probe.why}".rstrip()
