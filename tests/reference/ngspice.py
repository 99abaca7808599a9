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

OPTIONS = ".options reltol=1e-9 abstol=1e-15 vntol=1e-12 gmin=1e-12 itl1=2000 itl2=2000 numdgt=15"


def installed() -> bool:
    """Whether ngspice can be run here."""
    return shutil.which("ngspice") is not None


def deck(
    netlist: Netlist,
    copies: Sequence[Mapping[str, float]],
    unknown_amps: Mapping[str, float] | None = None,
    start: Mapping[str, float] | None = None,
    *,
    plain_junctions: bool = False,
) -> tuple[str, dict[str, str]]:
    """Write copies of a netlist, each with its own values, as one deck.

    Parameters
    ----------
    unknown_amps : mapping
        The current to feed in for each unknown conductance, as our solution found it.
    start : mapping
        Where ngspice's search starts, by node (10 mV steps): hard faults are beyond it otherwise. A start is let go
        before the end; the solution is ngspice's own. Supply terminals start at their set voltage in any case.
    plain_junctions : bool
        State what ngspice adds to a transistor by itself as elements of the deck: RB, RC and RE (which hide the inner
        nodes) and 1e-12 S beside each junction. ngspice counts that conductance to the transport current too, which
        shows where nothing else flows; with these options it adds a millionth of it. Each supply has an ammeter (``i_``
        and its number in the results), because its knee makes of a rail's last microvolt a tenth of a milliampere.

    Returns
    -------
    deck, names : str, dict
        The text; and node name to ngspice's node name without the copy's number.
    """
    names = {node: f"n{k}" for k, node in enumerate(netlist.nodes())}
    options = OPTIONS.replace("gmin=1e-12", "gmin=1e-18") if plain_junctions else OPTIONS
    lines = ["circuit and values by our tests", options]
    for number, values in enumerate(copies):
        lines += _copy(netlist, values, names, number, unknown_amps or {}, plain_junctions)
        begin = _set_voltages(netlist, values) | dict(start or {})
        lines += [f".nodeset v({names[node]}_{number})={volts:.2f}" for node, volts in begin.items() if node in names]
    # the control section prints every node of every copy in 16 digits
    lines += [".control", "set numdgt=16", "set width=200", "op"]
    lines += [f"print v({name}_{k})" for k in range(len(copies)) for name in names.values()]
    if plain_junctions:
        supplies = [n for n, e in enumerate(netlist.elements.values()) if isinstance(e, Supply)]
        lines += [f"print i(vamps{n}_{k})" for k in range(len(copies)) for n in supplies]
    lines += [".endc", ".end"]
    return "\n".join(lines) + "\n", names


def _set_voltages(netlist: Netlist, values: Mapping[str, float]) -> dict[str, float]:
    supplies = [e for e in netlist.elements.values() if isinstance(e, Supply)]
    plus = {e.plus: values[f"{e.name}.volts"] for e in supplies if e.minus == GROUND}
    return plus | {e.minus: -values[f"{e.name}.volts"] for e in supplies if e.plus == GROUND}


def _number(value: float) -> str:
    """Twelve digits, so that another machine's last digit makes no other deck."""
    return f"{float(value):.12g}"


def _copy(
    netlist: Netlist,
    values: Mapping[str, float],
    names: Mapping[str, str],
    number: int,
    unknown_amps: Mapping[str, float],
    plain_junctions: bool,
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
            lines.append(f"R{tag} {at(e.a)} {at(e.b)} {_number(max(values[e.name], 1e-3))}")
        elif isinstance(e, Transistor):
            made = _plain_transistor if plain_junctions else _transistor
            lines += made(e, values, tag, (at(e.collector), at(e.base), at(e.emitter)))
        elif isinstance(e, Supply):
            limit, lack = (
                float(values[f"{e.name}.limit_a"]),
                f"({_number(values[f'{e.name}.volts'])}-{volts(e.plus, e.minus)})",
            )
            inside = f"s{tag}" if plain_junctions else at(e.plus)
            lines.append(
                f"B{tag} {at(e.minus)} {inside} I={_number(limit)}*tanh({lack}/{_number(limit * 10e-3)})+1e-6*{lack}"
            )
            if plain_junctions:
                lines.append(f"Vamps{k}_{number} s{tag} {at(e.plus)} 0")
        elif isinstance(e, Source):
            amps = float(values[f"{e.name}.amps"])
            lines.append(
                f"B{tag} {at(e.from_node)} {at(e.to_node)} I={_number(amps)}*tanh({volts(e.from_node, e.to_node)}/0.3)"
            )
        elif isinstance(e, Servo):
            sign = "-" if e.senses == "to" else ""
            error = f"({sign}({volts(e.sense, e.reference)}-({_number(values[f'{e.name}.rest_v'])}))/10e-6)"
            most = float(values[f"{e.name}.max_a"])
            lines.append(
                f"B{tag} {at(e.from_node)} {at(e.to_node)} "
                f"I={_number(most)}*0.5*(1+tanh({error}))*tanh({volts(e.from_node, e.to_node)}/0.3)"
            )
        elif isinstance(e, Ohmmeter):
            amps, most = float(values[f"{e.name}.amps"]), float(values[f"{e.name}.compliance_v"])
            lines.append(
                f"B{tag} {at(e.minus)} {at(e.plus)} "
                f"I={_number(amps)}*tanh(({_number(most)}-{volts(e.plus, e.minus)})/0.05)"
            )
        elif isinstance(e, Unknown):
            lines.append(f"I{tag} {at(e.a)} {at(e.b)} {_number(unknown_amps[e.name])}")
    lines += [f"Rleak{k}_{number} {at(node)} 0 1e12" for k, node in enumerate(names)]
    return lines


def _transistor(e: Transistor, values: Mapping[str, float], tag: str, nodes: tuple[str, str, str]) -> list[str]:
    given = {key: float(values[f"{e.name}.{key}"]) for key in TRANSISTOR_DEFAULTS if f"{e.name}.{key}" in values}
    kind = "PNP" if given.pop("polarity", 1.0) < 0 else "NPN"
    celsius = given.pop("kelvin", 300.15) - 273.15
    text = " ".join(f"{key}={_number(value)}" for key, value in given.items() if abs(value) != float("inf"))
    return [f"Q{tag} {' '.join(nodes)} M{tag} temp={_number(celsius)}", f".model M{tag} {kind}({text})"]


def _plain_transistor(
    e: Transistor, values: Mapping[str, float], tag: str, nodes: tuple[str, str, str]
) -> list[str]:  # fmt: skip
    inside, lines, own = list(nodes), [], dict(values)
    for k, key in enumerate(("RC", "RB", "RE")):
        ohm = own.pop(f"{e.name}.{key}", 0.0)
        if ohm > 0.0:
            inside[k] = f"i{key}{tag}"
            lines += [
                f"R{key}{tag} {nodes[k]} {inside[k]} {_number(max(ohm, 1e-4))}",
                f"Rleak{key}{tag} {inside[k]} 0 1e12",
            ]
    collector, base, emitter = inside
    lines += [f"Rbe{tag} {base} {emitter} 1e12", f"Rbc{tag} {base} {collector} 1e12"]
    return lines + _transistor(e, own, tag, (collector, base, emitter))


def run_deck(
    netlist: Netlist,
    values: Mapping[str, float],
    unknown_amps: Mapping[str, float] | None = None,
    start: Mapping[str, float] | None = None,
) -> dict[str, float]:
    """Node voltages [V] of one unit by node name, by ngspice or from its committed results.

    ``start`` holds node voltages for ngspice's first iterations (``.nodeset``, rounded to 1 mV): it forces nothing, but
    without it ngspice doesn't find into the narrow knee of a servo.
    """
    text, names = deck(netlist, [values], unknown_amps)
    if start is not None:
        hints = "".join(f".nodeset v({names[node]}_0)={volts:.3f}\n" for node, volts in start.items())
        text = text.replace(".control\n", hints + ".control\n", 1)
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


def _child_seconds() -> float:
    """Processor time [s] of all programs that were run and have ended."""
    try:
        import resource
    except ImportError:  # not POSIX: hundredths of a second, or nothing
        spent = os.times()
        return spent.children_user + spent.children_system
    usage = resource.getrusage(resource.RUSAGE_CHILDREN)
    return usage.ru_utime + usage.ru_stime


def run_text(text: str, timeout_s: float = 600.0) -> tuple[dict[str, float], float]:
    """Run a deck in batch; every printed node's voltage [V] by ngspice's name, and the processor seconds it took."""
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "deck.cir"
        path.write_text(text)
        begun = _child_seconds()
        done = subprocess.run(
            ["ngspice", "-b", path.name], cwd=folder, capture_output=True, text=True, timeout=timeout_s, check=False
        )
        seconds = _child_seconds() - begun
    shown = re.finditer(r"^(?:v\(|i\(vamps)(\w+)\) = (\S+)\s*$", done.stdout, re.MULTILINE)
    found = {m[1] if m[0][0] == "v" else f"i_{m[1]}": float(m[2]) for m in shown}
    wanted = text.count("\nprint v(") + text.count("\nprint i(")
    trouble = re.search(
        r"(?im)^.*(doanalyses|singular matrix|no such|iteration limit|failed).*$", done.stdout + done.stderr
    )
    if len(found) != wanted or "doAnalyses" in done.stdout + done.stderr:
        said = trouble[0] if trouble else (done.stdout + done.stderr)[-800:]
        raise RuntimeError(f"ngspice printed {len(found)} of {wanted} voltages: {said}")
    return found, seconds
