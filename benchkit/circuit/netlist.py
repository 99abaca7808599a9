"""What is connected to what: the structure of a circuit, without any value.

Rules
-----
* Nodes are strings; ``"0"`` is the reference. A node exists as soon as an element names it.
* Every element has a name of its own, any text. Values come later, at the solve, as a mapping from ``"name"`` or
  ``"name.key"`` to a number or to an array of one number per unit.
* Faults are values: what can be shorted or opened is an element that is always there.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from benchkit.errors import ModelError

GROUND = "0"

TRANSISTOR_DEFAULTS: dict[str, float] = {
    "polarity": 1.0,
    "kelvin": 300.15,
    "IS": 1e-16,
    "BF": 100.0,
    "NF": 1.0,
    "VAF": float("inf"),
    "IKF": float("inf"),
    "ISE": 0.0,
    "NE": 1.5,
    "BR": 1.0,
    "NR": 1.0,
    "VAR": float("inf"),
    "IKR": float("inf"),
    "ISC": 0.0,
    "NC": 2.0,
    "RB": 0.0,
    "RE": 0.0,
    "RC": 0.0,
    "XTI": 3.0,
    "EG": 1.11,
    "XTB": 0.0,
}
"""Gummel-Poon d.c. parameters at 27 degC and what an absent one is (SPICE's published defaults), SI units.

``polarity`` is +1 for npn and -1 for pnp; ``kelvin`` is the junction temperature.
"""


@dataclass(frozen=True)
class Resistor:
    """A resistor; value key ``name`` in ohm, held at or above 1 mohm."""

    name: str
    a: str
    b: str


@dataclass(frozen=True)
class Transistor:
    """A bipolar transistor; value keys ``name.KEY`` for the keys of `TRANSISTOR_DEFAULTS`."""

    name: str
    collector: str
    base: str
    emitter: str


@dataclass(frozen=True)
class Supply:
    """A supply with a current limit; value keys ``name.volts`` and ``name.limit_a``."""

    name: str
    plus: str
    minus: str


@dataclass(frozen=True)
class Source:
    """A current source that saturates when no voltage is left to it; value key ``name.amps``."""

    name: str
    from_node: str
    to_node: str


@dataclass(frozen=True)
class Servo:
    """A current that takes the value which holds a node; value keys ``name.rest_v`` and ``name.max_a``.

    ``senses`` says which end of the servo the sensed voltage follows: ``"from"`` when more servo current pulls it down,
    ``"to"`` when more servo current lifts it.
    """

    name: str
    from_node: str
    to_node: str
    sense: str
    reference: str
    senses: Literal["from", "to"]


@dataclass(frozen=True)
class Unknown:
    """A conductance of unknown value between ``a`` and ``b`` that makes v(p) - v(q) equal to ``name.volts``."""

    name: str
    a: str
    b: str
    p: str
    q: str


@dataclass(frozen=True)
class Ohmmeter:
    """A test current with a compliance voltage; value keys ``name.amps`` and ``name.compliance_v``."""

    name: str
    plus: str
    minus: str


Element = Resistor | Transistor | Supply | Source | Servo | Unknown | Ohmmeter


class Netlist:
    """A circuit under construction.

    Each method adds one element. A name that is already taken raises `ModelError`.
    """

    def __init__(self) -> None:
        self.elements: dict[str, Element] = {}

    def _add(self, element: Element) -> None:
        if element.name in self.elements:
            raise ModelError(f"the circuit has two elements named {element.name!r}", "every name once")
        self.elements[element.name] = element

    def resistor(self, name: str, a: str, b: str) -> None:
        """Add a resistor between ``a`` and ``b``: value ``name`` in ohm."""
        self._add(Resistor(name, a, b))

    def transistor(self, name: str, collector: str, base: str, emitter: str) -> None:
        """Add a transistor: values ``name.polarity`` (+1 npn, -1 pnp), ``name.kelvin``, ``name.IS`` and the others."""
        self._add(Transistor(name, collector, base, emitter))

    def supply(self, name: str, plus: str, minus: str) -> None:
        """Add a supply: values ``name.volts`` and ``name.limit_a``.

        It delivers limit * tanh(w / (limit * 10 mohm)) + 1 uS * w, with w what its terminals lack of ``volts``.
        """
        self._add(Supply(name, plus, minus))

    def source(self, name: str, from_node: str, to_node: str) -> None:
        """Add a current source: value ``name.amps``, flowing inside from ``from_node`` to ``to_node``.

        The current is amps * tanh((v(from) - v(to)) / 0.3 V).
        """
        self._add(Source(name, from_node, to_node))

    def servo(
        self,
        name: str,
        from_node: str,
        to_node: str,
        sense: str,
        reference: str = GROUND,
        senses: Literal["from", "to"] | None = None,
    ) -> None:
        """Add a servo: values ``name.rest_v`` and ``name.max_a``.

        Its current, from ``from_node`` to ``to_node``, stays between 0 and ``max_a`` and takes whatever value holds
        v(sense) - v(reference) at ``rest_v``; like a source it saturates when no voltage is left to it.

        Parameters
        ----------
        senses : {"from", "to"}, optional
            Which end's voltage the sensed node follows. When left out: ``"to"`` if the servo's current comes out of a
            supply's terminal, else ``"from"``.
        """
        if senses is None:
            senses = "to" if from_node in self._supply_terminals() else "from"
        self._add(Servo(name, from_node, to_node, sense, reference, senses))

    def unknown(self, name: str, a: str, b: str, p: str, q: str) -> None:
        """Add an unknown conductance between ``a`` and ``b`` that makes v(p) - v(q) = ``name.volts``."""
        self._add(Unknown(name, a, b, p, q))

    def ohmmeter(self, name: str, plus: str, minus: str) -> None:
        """Add a meter's ohms or diode range: values ``name.amps`` (out of ``plus``) and ``name.compliance_v``."""
        self._add(Ohmmeter(name, plus, minus))

    def nodes(self) -> tuple[str, ...]:
        """All nodes but the reference, in the order in which elements named them."""
        seen: dict[str, None] = {}
        for element in self.elements.values():
            for node in terminals(element):
                seen.setdefault(node)
        seen.pop(GROUND, None)
        return tuple(seen)

    def _supply_terminals(self) -> set[str]:
        return {
            node
            for element in self.elements.values()
            if isinstance(element, Supply)
            for node in (element.plus, element.minus)
            if node != GROUND
        }


def terminals(element: Element) -> tuple[str, ...]:
    """Every node that an element names, sensing nodes included."""
    if isinstance(element, Resistor):
        return (element.a, element.b)
    if isinstance(element, Transistor):
        return (element.collector, element.base, element.emitter)
    if isinstance(element, (Supply, Ohmmeter)):
        return (element.plus, element.minus)
    if isinstance(element, Source):
        return (element.from_node, element.to_node)
    if isinstance(element, Servo):
        return (element.from_node, element.to_node, element.sense, element.reference)
    return (element.a, element.b, element.p, element.q)
