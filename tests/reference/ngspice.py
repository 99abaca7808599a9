"""The same circuit through ngspice: deck, batch run, node voltages.

ngspice (Berkeley SPICE3's successor, a Debian package) is an independent program. A deck states our laws for supplies,
sources, servos and meters as behavioural sources; resistors and transistors are ngspice's own.

Where ngspice is not installed, committed results of the very same deck text are used instead, and the test run says so
at its end. ``BENCHKIT_WRITE_REFERENCE=1`` in the environment adds the results of decks that are run to that file.
"""

from __future__ import annotations

import hashlib
import json
import os
import re
import shutil
import subprocess
import tempfile
import time
from collections.abc import Mapping, Sequence
from pathlib import Path

import pytest

from benchkit.circuit.netlist import (
    GROUND,
    TRANSISTOR_DEFAULTS,
    Netlist,
    Ohmmeter,
    Resistor,
    Servo,
    Source,
    Supply,
    Transistor,
    Unknown,
)

COMMITTED = Path(__file__).parent / "data" / "ngspice.json"
used_committed: list[str] = []
"""Digests of decks whose committed results stood in for a run."""

_OPTIONS = ".options reltol=1e-9 abstol=1e-15 vntol=1e-12 gmin=1e-12 itl1=2000 itl2=2000 numdgt=15"


def installed() -> bool:
    """Whether ngspice can be run here."""
    return shutil.which("ngspice") is not None


def deck(
    netlist: Netlist, copies: Sequence[Mapping[str, float]], unknown_amps: Mapping[str, float] | None = None
) -> tuple[str, dict[str, str]]:
    """Write copies of a netlist, each with its own values, as one deck.

    ``unknown_amps`` holds the current to feed in for each unknown conductance, as our solution found it.

    Returns
    -------
    deck, names : str, dict
        The text; and node name to ngspice's node name without the copy's number.
    """
    names = {node: f"n{k}" for k, node in enumerate(netlist.nodes())}
    lines = ["circuit and values by our tests", _OPTIONS]
    for number, values in enumerate(copies):
        lines += _copy(netlist, values, names, number, unknown_amps or {})
    # the control section prints every node of every copy in 16 digits
    lines += [".control", "set numdgt=16", "set width=200", "op"]
    lines += [f"print v({name}_{k})" for k in range(len(copies)) for name in names.values()]
    lines += [".endc", ".end"]
    return "\n".join(lines) + "\n", names


def _copy(
    netlist: Netlist,
    values: Mapping[str, float],
    names: Mapping[str, str],
    number: int,
    unknown_amps: Mapping[str, float],
) -> list[str]:
    def at(node: str) -> str:
        return "0" if node == GROUND else f"{names[node]}_{number}"

    def volts(a: str, b: str) -> str:
        return (
            f"(v({at(a)})-v({at(b)}))"
            if GROUND not in (a, b)
            else (f"v({at(a)})" if b == GROUND else f"(0-v({at(b)}))")
        )

    lines = []
    for k, e in enumerate(netlist.elements.values()):
        tag = f"{k}_{number}"
        if isinstance(e, Resistor):
            lines.append(f"R{tag} {at(e.a)} {at(e.b)} {max(values[e.name], 1e-3)!r}")
        elif isinstance(e, Transistor):
            lines += _transistor(e, values, tag, (at(e.collector), at(e.base), at(e.emitter)))
        elif isinstance(e, Supply):
            limit, lack = (
                float(values[f"{e.name}.limit_a"]),
                f"({float(values[f'{e.name}.volts'])!r}-{volts(e.plus, e.minus)})",
            )
            lines.append(f"B{tag} {at(e.minus)} {at(e.plus)} I={limit!r}*tanh({lack}/{limit * 10e-3!r})+1e-6*{lack}")
        elif isinstance(e, Source):
            amps = float(values[f"{e.name}.amps"])
            lines.append(
                f"B{tag} {at(e.from_node)} {at(e.to_node)} I={amps!r}*tanh({volts(e.from_node, e.to_node)}/0.3)"
            )
        elif isinstance(e, Servo):
            sign = "-" if e.senses == "to" else ""
            error = f"({sign}({volts(e.sense, e.reference)}-({float(values[f'{e.name}.rest_v'])!r}))/10e-6)"
            most = float(values[f"{e.name}.max_a"])
            lines.append(
                f"B{tag} {at(e.from_node)} {at(e.to_node)} "
                f"I={most!r}*0.5*(1+tanh({error}))*tanh({volts(e.from_node, e.to_node)}/0.3)"
            )
        elif isinstance(e, Ohmmeter):
            amps, most = float(values[f"{e.name}.amps"]), float(values[f"{e.name}.compliance_v"])
            lines.append(f"B{tag} {at(e.minus)} {at(e.plus)} I={amps!r}*tanh(({most!r}-{volts(e.plus, e.minus)})/0.05)")
        elif isinstance(e, Unknown):
            lines.append(f"I{tag} {at(e.a)} {at(e.b)} {float(unknown_amps[e.name])!r}")
    lines += [f"Rleak{k}_{number} {at(node)} 0 1e12" for k, node in enumerate(names)]
    return lines


def _transistor(e: Transistor, values: Mapping[str, float], tag: str, nodes: tuple[str, str, str]) -> list[str]:
    given = {key: float(values[f"{e.name}.{key}"]) for key in TRANSISTOR_DEFAULTS if f"{e.name}.{key}" in values}
    kind = "PNP" if given.pop("polarity", 1.0) < 0 else "NPN"
    celsius = given.pop("kelvin", 300.15) - 273.15
    text = " ".join(f"{key}={value!r}" for key, value in given.items() if abs(value) != float("inf"))
    return [f"Q{tag} {' '.join(nodes)} M{tag} temp={celsius!r}", f".model M{tag} {kind}({text})"]


def run_deck(
    netlist: Netlist, values: Mapping[str, float], unknown_amps: Mapping[str, float] | None = None
) -> dict[str, float]:
    """Node voltages [V] of one unit by node name, by ngspice or from its committed results."""
    text, names = deck(netlist, [values], unknown_amps)
    digest = hashlib.sha256(text.encode()).hexdigest()
    committed: dict[str, dict[str, float]] = json.loads(COMMITTED.read_text()) if COMMITTED.exists() else {}
    if not installed():
        if digest not in committed:
            pytest.skip("ngspice is not installed and there is no committed result of this circuit")
        used_committed.append(digest)
        return committed[digest]
    found, _ = run_text(text)
    result = {node: found[f"{name}_0"] for node, name in names.items()}
    if os.environ.get("BENCHKIT_WRITE_REFERENCE") and committed.get(digest) != result:
        committed[digest] = result
        COMMITTED.parent.mkdir(exist_ok=True)
        COMMITTED.write_text(json.dumps(committed, indent=1, sort_keys=True) + "\n")
    return result


def run_text(text: str) -> tuple[dict[str, float], float]:
    """Run a deck in batch; every printed node's voltage [V] by ngspice's name, and the seconds that it took."""
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "deck.cir"
        path.write_text(text)
        begun = time.perf_counter()
        done = subprocess.run(
            ["ngspice", "-b", path.name], cwd=folder, capture_output=True, text=True, timeout=600, check=False
        )
        seconds = time.perf_counter() - begun
    found = {m[1]: float(m[2]) for m in re.finditer(r"^v\((\w+)\) = (\S+)\s*$", done.stdout, re.MULTILINE)}
    wanted = text.count("\nprint v(")
    trouble = re.search(
        r"(?im)^.*(doanalyses|singular matrix|no such|iteration limit|failed).*$", done.stdout + done.stderr
    )
    if len(found) != wanted or "doAnalyses" in done.stdout + done.stderr:
        said = trouble[0] if trouble else (done.stdout + done.stderr)[-800:]
        raise RuntimeError(f"ngspice printed {len(found)} of {wanted} voltages: {said}")
    return found, seconds
