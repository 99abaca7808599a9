"""The structure of a circuit's equations: indices only, no values.

The unknowns x are the node voltages and the currents of unknown conductances; the equations are one sum of currents [A]
per node, and one condition [V] per unknown conductance (modified nodal analysis: C.-W. Ho, A. E. Ruehli, P. A. Brennan,
IEEE Transactions on Circuits and Systems 22 (1975), 504-509).

Rules
-----
* Row ``plan.size`` of an extended x is the reference node, always 0.
* A branch current is counted positive out of its first node.
* A transistor's base, emitter or collector resistance gets an internal node only if it is not zero in every unit.
* From each node 1e-12 S lead to the reference. An island of nodes that no element ties to the reference is tied there
  by 1 S at one node, which carries no current.
* Branches and slopes are numbered kind by kind; `Plan` lists, for each, the rows or slots that it is added to. What
  works out their values is in ``equations``.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from benchkit.circuit.devices import Array
from benchkit.circuit.elimination import Index, Structure
from benchkit.circuit.netlist import (
    GROUND,
    Netlist,
    Ohmmeter,
    Resistor,
    Servo,
    Source,
    Supply,
    Transistor,
    Unknown,
    terminals,
)

NODE_GMIN_S = 1e-12
"""Conductance from every node to the reference."""
ISLAND_TIE_S = 1.0

Signature = tuple[tuple[bool, bool, bool], ...]
"""Per transistor: whether collector, base and emitter have an internal node."""


class Plan:
    """The structure of a circuit's equations for one signature of internal nodes."""

    def __init__(self, netlist: Netlist, signature: Signature) -> None:
        elements = list(netlist.elements.values())
        self.signature = signature
        self.resistors = [e for e in elements if isinstance(e, Resistor)]
        self.transistors = [e for e in elements if isinstance(e, Transistor)]
        self.sigmoids = [e for e in elements if isinstance(e, (Supply, Source, Ohmmeter))]
        self.servos = [e for e in elements if isinstance(e, Servo)]
        self.unknowns = [e for e in elements if isinstance(e, Unknown)]

        names = list(netlist.nodes())
        self.internal: list[tuple[str, str, int]] = []  # (transistor, parameter, external node's index)
        node = {name: k for k, name in enumerate(names)}
        inner: list[list[int]] = []
        for transistor, made in zip(self.transistors, signature, strict=True):
            ends = []
            outside = (transistor.collector, transistor.base, transistor.emitter)
            for external, parameter, wanted in zip(outside, ("RC", "RB", "RE"), made, strict=True):
                if wanted:
                    name = f"{transistor.name}\x00{parameter}"
                    node[name] = len(names)
                    names.append(name)
                    self.internal.append((transistor.name, parameter, node.get(external, -1)))
                    ends.append(node[name])
                else:
                    ends.append(node.get(external, -1))
            inner.append(ends)
        self.nodes = len(names)
        self.size = ground = self.nodes + len(self.unknowns)
        self.names = names + [f"{e.name}\x00current" for e in self.unknowns]
        self.index = {name: k for k, name in enumerate(self.names)} | {GROUND: ground}

        def at(*columns: list[str]) -> list[Index]:
            return [np.array([self.index[name] for name in column], dtype=np.intp) for column in columns]

        first = self.nodes - len(self.internal)
        outer = [ground if k < 0 else k for _, _, k in self.internal]
        ra, rb = at([e.a for e in self.resistors], [e.b for e in self.resistors])
        self.ra = np.concatenate([ra, np.array(outer, dtype=np.intp)])
        self.rb = np.concatenate([rb, np.arange(first, self.nodes, dtype=np.intp)])
        self.sa, self.sb = at([terminals(e)[0] for e in self.sigmoids], [terminals(e)[1] for e in self.sigmoids])
        self.va, self.vb, self.vs, self.vr = at(*(list(c) for c in _columns([terminals(e) for e in self.servos], 4)))
        self.ua, self.ub, self.up, self.uq = at(*(list(c) for c in _columns([terminals(e) for e in self.unknowns], 4)))
        self.uk = np.arange(self.nodes, self.size, dtype=np.intp)
        ends_array = np.array(inner, dtype=np.intp).reshape(-1, 3)
        ends_array[ends_array < 0] = ground
        self.tc, self.tb, self.te = (np.ascontiguousarray(ends_array[:, k]) for k in range(3))
        self.senses = np.array([[-1.0 if e.senses == "to" else 1.0] for e in self.servos]).reshape(-1, 1)
        self._lay_out()

    def _lay_out(self) -> None:
        """Number branches and slopes, and list which row or slot each goes to."""
        r, s, k, u, t = len(self.ra), len(self.sa), len(self.va), len(self.ua), len(self.tc)
        self.counts = (r, s, k, u, t)
        starts = np.concatenate([[0], np.cumsum([r, s, k, u, t, t, t])]).tolist()
        self.branch_starts = starts
        self.branches = starts[-1]
        self.current_terms: list[tuple[int, int, bool]] = []  # (row, branch, taken with minus sign)
        pairs = [(self.ra, self.rb), (self.sa, self.sb), (self.va, self.vb), (self.ua, self.ub)]
        for start, (a, b) in zip(starts[:4], pairs, strict=True):
            for j in range(len(a)):
                self._flow(start + j, int(a[j]), int(b[j]))
        for start, ends in zip(starts[4:7], (self.tc, self.tb, self.te), strict=True):
            for j in range(t):
                self._flow(start + j, int(ends[j]), self.size)

        fixed: list[tuple[int, int, int, float]] = []  # (row, column, resistor or -1, sign or value)
        for j in range(r):
            fixed += [(*where, j, sign) for where, sign in self._conductance(int(self.ra[j]), int(self.rb[j]))]
        fixed += [(n, n, -1, NODE_GMIN_S) for n in range(self.nodes)]
        fixed += [(n, n, -1, ISLAND_TIE_S) for n in self._islands()]
        for j in range(u):
            current = int(self.uk[j])
            fixed += [(int(self.ua[j]), current, -1, 1.0), (int(self.ub[j]), current, -1, -1.0)]
            fixed += [(current, int(self.up[j]), -1, 1.0), (current, int(self.uq[j]), -1, -1.0)]
        self.ties = self._islands()

        moving: list[tuple[int, int, int, bool]] = []  # (row, column, slope, taken with minus sign)
        for j in range(s):
            moving += [(*w, j, sign < 0) for w, sign in self._conductance(int(self.sa[j]), int(self.sb[j]))]
        for j in range(k):
            one, two, up, down = (int(n[j]) for n in (self.va, self.vb, self.vs, self.vr))
            moving += [(*w, s + j, sign < 0) for w, sign in self._conductance(one, two)]
            moving += [(one, up, s + k + j, False), (one, down, s + k + j, True)]
            moving += [(two, up, s + k + j, True), (two, down, s + k + j, False)]
        base = s + 2 * k
        for j in range(t):
            rows = (int(self.tc[j]), int(self.tb[j]), int(self.te[j]))
            # slopes per transistor: 3 by 3, rows collector, base, emitter; columns the same
            moving += [
                (row, column, base + (3 * m + n) * t + j, False)
                for m, row in enumerate(rows)
                for n, column in enumerate(rows)
            ]
        self.slopes = base + 9 * t
        inside = [e for e in fixed if e[0] < self.size and e[1] < self.size]
        moving = [e for e in moving if e[0] < self.size and e[1] < self.size]
        self.structure = Structure(self.size, {(e[0], e[1]) for e in inside} | {(e[0], e[1]) for e in moving})
        slot = self.structure.slot
        self.fixed_terms = [(slot[i, j], which, value) for i, j, which, value in inside]
        self.slope_terms = [(slot[i, j], which, minus) for i, j, which, minus in moving]
        self.diagonal: Index = np.array([slot[n, n] for n in range(self.nodes)], dtype=np.intp)
        self._lay_out_matrices()

    def _lay_out_matrices(self) -> None:
        """Write the same lists as matrices, by which one unit alone is served quicker than term by term."""
        self.into_rows = np.zeros((self.size, self.branches))
        for row, branch, minus in self.current_terms:
            self.into_rows[row, branch] += -1.0 if minus else 1.0
        self.touches_rows = np.zeros((self.size, self.branches))
        for row, branch, _ in self.current_terms:
            self.touches_rows[row, branch] += 1.0
        self.into_slots = np.zeros((self.structure.slots, self.slopes))
        for slot, which, minus in self.slope_terms:
            self.into_slots[slot, which] += -1.0 if minus else 1.0
        self.always = np.zeros(self.structure.slots)
        self.by_resistor = np.zeros((self.structure.slots, len(self.ra)))
        for slot, resistor, value in self.fixed_terms:
            if resistor < 0:
                self.always[slot] += value
            else:
                self.by_resistor[slot, resistor] += value

    def _flow(self, branch: int, a: int, b: int) -> None:
        if a < self.size:
            self.current_terms.append((a, branch, False))
        if b < self.size:
            self.current_terms.append((b, branch, True))

    @staticmethod
    def _conductance(a: int, b: int) -> Iterator[tuple[tuple[int, int], float]]:
        yield (a, a), 1.0
        yield (b, b), 1.0
        yield (a, b), -1.0
        yield (b, a), -1.0

    def _islands(self) -> list[int]:
        """One node of each group that nothing ties to the reference."""
        group = list(range(self.size + 1))

        def root(n: int) -> int:
            while group[n] != n:
                n = group[n]
            return n

        pairs = [(self.ra, self.rb), (self.sa, self.sb), (self.va, self.vb), (self.ua, self.ub)]
        pairs += [(self.tc, self.tb), (self.tb, self.te)]
        for a, b in pairs:
            for m, n in zip(a.tolist(), b.tolist(), strict=True):
                group[root(m)] = root(n)
        found: dict[int, int] = {}
        for n in range(self.nodes):
            if root(n) != root(self.size):
                found.setdefault(root(n), n)
        return sorted(found.values())

    def sum_currents(self, currents: Array, x: Array, volts: Array, magnitudes: bool = False) -> Array:
        """Residual of each equation, shape (size, units): currents out of nodes [A], conditions [V].

        Parameters
        ----------
        currents : array, shape (branches, units)
        x : array, shape (size, units)
        volts : array, shape (unknowns, units)
            What the conditions of unknown conductances ask for.
        magnitudes : bool
            Return the sum of the magnitudes of the terms instead.
        """
        if magnitudes:
            currents = np.abs(currents)
        if currents.shape[1] == 1:
            result = (self.touches_rows if magnitudes else self.into_rows) @ currents
        else:
            result = np.zeros((self.size, currents.shape[1]))
            rows, branches = list(result), list(currents)
            for row, branch, minus in self.current_terms:
                if minus and not magnitudes:
                    rows[row] -= branches[branch]
                else:
                    rows[row] += branches[branch]
        if magnitudes:
            x, volts = np.abs(x), np.abs(volts)
        result[: self.nodes] += NODE_GMIN_S * x[: self.nodes]
        for n in self.ties:
            result[n] += ISLAND_TIE_S * x[n]
        if len(self.uk):
            full = np.concatenate([x, np.zeros((1, x.shape[1]))])
            if magnitudes:
                result[self.uk] = full[self.up] + full[self.uq] + volts
            else:
                result[self.uk] = full[self.up] - full[self.uq] - volts
        return result


def _columns(rows: list[tuple[str, ...]], width: int) -> list[tuple[str, ...]]:
    return list(zip(*rows, strict=True)) if rows else [()] * width
