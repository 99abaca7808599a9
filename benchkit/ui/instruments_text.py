"""The words of ``benchkit instruments``: what was found, who answered, what a check showed, and what to do next.

Everything is made of the same plain tables that ``--json`` prints, so that nothing is said that a program can't have.
"""

from __future__ import annotations

import re
import shlex
import sys
import textwrap
from collections.abc import Mapping, Sequence
from typing import Any, Final, TextIO

import click

from benchkit.quantities import show

Table = Mapping[str, Any]

COLUMNS: Final = 80
"""No line of words is longer; what is to be typed keeps its line."""

NOT_ASKED: Final = "not asked"
"""What the tables say of a question that came after one without an answer."""

_NUMBER_AND_UNIT: Final = re.compile(r"(?<![\w.])[-+]?[0-9][0-9.]* [A-Za-z%]+")

TYPED = (
    "TCPIP::192.168.1.20::5025::SOCKET    a network socket, often at port 5025",
    "TCPIP::192.168.1.20::inst0::INSTR    VXI-11",
    "TCPIP::192.168.1.20::hislip0::INSTR  HiSLIP",
    "ASRL/dev/ttyUSB0::INSTR              a serial port; Windows: ASRL3::INSTR",
    "USB0::0x1234::0x5678::SERIAL::INSTR  USB; vendor and product as lsusb has them",
)
"""Addresses that can always be typed."""


def found_lines(findings: Table, *, network: bool) -> list[str]:
    """Return what was found, and the next thing to type."""
    found: Sequence[Table] = findings["found"]
    lines: list[str] = []
    for one in found:
        lines.append(f"{one['address'] or '(no address)'}")
        lines += _wrapped(f"    {one['what']}")
        if one["problem"]:
            lines += _wrapped(f"    can't be used yet: {one['problem']}")
            lines += [f"      {line}" for line in one["cure"]]
    if not found:
        lines.append("Nothing was found.")
    lines += [line for note in findings["notes"] for line in _wrapped(f"Note: {note}")]
    lines.append("")
    ready = [one["address"] for one in found if one["address"] and not one["problem"]]
    if ready:
        lines += ["Next, ask who answers there. This sends to it: leave out what is no instrument."]
        lines.append(f"  benchkit instruments identify {' '.join(map(_typed, ready))}")
    else:
        lines += ["An instrument need not be found to be used. Type its address, or the host alone:"]
        lines += [f"  {line}" for line in TYPED]
        lines += ["Next, ask who answers there:", "  benchkit instruments identify 192.168.1.20"]
    if not network:
        lines += [
            "The network was not searched. To ask it who speaks VXI-11 or HiSLIP:",
            "  benchkit instruments find --network",
        ]
    return lines


def identified_lines(several: Sequence[Table], visa: str = "") -> list[str]:
    """Return who answered, with which profile to speak to each, and the next thing to type."""
    lines: list[str] = []
    for one in several:
        lines += _identified(one)
    chosen = {kind: _first(several, kind) for kind in ("meter", "supply")}
    lines.append("")
    words = [f"--{kind} {_typed(address)}" for kind, address in chosen.items() if address]
    if words:
        if visa:
            words.append(f"--visa {_typed(visa)}")
        lines += ["Next, write a bench file:", f"  benchkit instruments write bench.toml {' '.join(words)}"]
        lacking = [kind for kind, address in chosen.items() if not address]
        if lacking:
            lines.append(f"Without a {lacking[0]} in it, a person {'reads' if lacking[0] == 'meter' else 'switches'}.")
    elif any(one["name"] for one in several):
        lines += [
            *_wrapped(
                "An instrument that answers no profile's questions needs a profile of its own: a file that says what it"
                " calls things. See Profiles in the README, then name the file:",
                " ",
            ),
            "  benchkit instruments identify ADDRESS --profile my-meter.toml",
        ]
    elif any(one["problem_kind"] == "timeout" for one in several):
        lines += [
            "If one stays silent, look at its own menu: remote control, address, port.",
            "On a serial line, try other speeds, and a lead that crosses (null modem):",
            "  benchkit instruments identify ADDRESS --baud 9600 --baud 19200 --baud 115200",
        ]
    else:
        lines += ["When that is put right, ask again; to see what can be found:", "  benchkit instruments find"]
    return lines


def _identified(one: Table) -> list[str]:
    lines = [one["address"]]
    if not one["name"]:
        return [*lines, *_wrapped(f"    {one['problem']}")]
    lines.append(f"    {one['name']}")
    if one["baud"]:
        lines.append(f"    answers at {one['baud']} baud")
    for fit in one["fits"]:
        if fit["complete"]:
            lines.append(f"    a {fit['kind']}: every question of the profile {fit['profile']} is answered")
            continue
        lines += _wrapped(f"    a {fit['kind']}, perhaps: {_part(fit)}")
        lines += _gaps(fit)
    if one["fits"]:
        return lines
    lines += _wrapped(f"    answers no questions of a profile that was tried ({', '.join(one['tried'])})")
    for fit in one["misses"]:
        lines += [f"    {fit['profile']}:", *_gaps(fit)]
    return lines


def _part(fit: Table) -> str:
    asked = len(fit["answered"]) + len(fit["unanswered"])
    return f"{len(fit['answered'])} of {asked} questions of the profile {fit['profile']} are answered, not these:"


def _gaps(fit: Table) -> list[str]:
    """Return which questions had no answer, and what came instead."""
    lines: list[str] = []
    for gap in fit["unanswered"]:
        if gap["what_happened"] != NOT_ASKED:
            lines += _wrapped(f"      {gap['question']}: {gap['what_happened']}")
    left = [gap["question"] for gap in fit["unanswered"] if gap["what_happened"] == NOT_ASKED]
    return lines + (_wrapped(f"      not asked after that: {', '.join(left)}") if left else [])


def checked_lines(checked: Table, path: str) -> list[str]:
    """Return what a check showed."""
    lines = [f"Bench: {checked['bench']}"]
    if checked["meter"] is not None:
        lines += _meter(checked["meter"])
    if checked["supply"] is not None:
        lines += _supply(checked["supply"])
    for title, key in (("To know:", "cautions"), ("Trouble:", "problems")):
        if checked[key]:
            lines += ["", title, *(line for text in checked[key] for line in _wrapped(f"  - {text}"))]
    lines.append("")
    if checked["stopped"]:
        lines.append(f"Stopped early ({checked['stopped']}).")
    if checked["problems"]:
        lines.append("Not everything worked. Put the trouble right and check again.")
    elif not checked["stopped"]:
        supply = checked["supply"]
        if supply is not None and supply["not_powered"]:
            lines.append("The supply was not switched on; what else was tried answered.")
        elif checked["cautions"]:
            lines.append("All that was tried answered.")
        else:
            lines.append("All that was tried worked.")
        lines.append('First see to what stands under "To know". Then:' if checked["cautions"] else "Next:")
        lines.append(f"  benchkit walk --design my-stage.toml --bench {_typed(path)}")
    return lines


def _meter(meter: Table) -> list[str]:
    lines = ["", f"Meter: {meter['name'] or 'did not say its name'}"]
    for one in meter["readings"]:
        if one["problem"]:
            said = one["problem"]
        elif one["overload"]:
            said = "overload"
        else:
            said = show(one["value"], one["unit"])
        if one["problem"]:
            lines += _wrapped(f"  {one['function']:<12} {said}", " " * 15)
        else:
            lines.append(f"  {one['function']:<12} {said:<16} {one['took_s']:.2f} s")
    return lines


def _supply(supply: Table) -> list[str]:
    lines = ["", f"Supply: {supply['name'] or 'did not say its name'}"]
    if supply["found"]:
        lines += ["  as found:", *_state(supply["found"])]
    if supply["not_powered"]:
        lines += _wrapped(f"  Not switched on: {supply['not_powered'][:1].lower()}{supply['not_powered'][1:]}.")
    if supply["into_open_circuit"]:
        lines += ["  on, with nothing connected:", *_state(supply["into_open_circuit"])]
    if supply["off_confirmed"]:
        lines += _wrapped(f"  Off again after {show(supply['on_s'], 's', 2)}, confirmed: {supply['off']}.")
        lines.append("  It is left off, with this check's low voltage, limit and protection in it.")
    elif supply["off_confirmed"] is not None:
        lines.append(f"  OFF IS NOT CONFIRMED: {supply['off']}")
    return lines


def _state(state: Table) -> list[str]:
    lines = []
    for rail in ("positive", "negative"):
        parts = []
        if f"set_{rail}_v" in state:
            parts.append(f"set to {show(state[f'set_{rail}_v'], 'V')}")
        if f"{rail}_v" in state:
            parts.append(f"reads {show(state[f'{rail}_v'], 'V')}")
        if f"{rail}_a" in state:
            parts.append(show(state[f"{rail}_a"], "A"))
        if f"protection_{rail}_v" in state:
            parts.append(f"over-voltage protection {show(state[f'protection_{rail}_v'], 'V')}")
        if state.get(f"{rail}_in_limit"):
            parts.append("in its current limit")
        if state.get(f"{rail}_tripped"):
            parts.append("tripped by its own protection")
        lines += _wrapped(f"    {rail}: {', '.join(parts)}", " " * 6)
    if "limit_a" in state:
        lines.append(f"    current limit {show(state['limit_a'], 'A')}; output {_output(state)}")
    return lines


def _output(state: Table) -> str:
    return {True: "on", False: "off"}.get(state.get("output_on"), "unknown")  # type: ignore[arg-type]


def before_power(name: str, volts: float, amps: float, most_s: float) -> list[str]:
    """Return what a person must know and do before saying yes."""
    return [
        "",
        f"The supply {name} can now be tried with nothing connected:",
        f"both outputs on at {show(volts, 'V', 2)}, limit {show(amps, 'A', 2)}, for at most {most_s:g} s, then off.",
        "Take everything off both outputs first, and look at them.",
        "If benchkit itself is killed meanwhile, switch the supply off by hand.",
    ]


def written_lines(path: str, lacking: Sequence[str], asked: Sequence[Table] = ()) -> list[str]:
    """Return what is left to do in a bench file that has just been written.

    Parameters
    ----------
    path : str
    lacking : sequence of str
        What only papers know.
    asked : sequence of mapping
        What is known of the instruments in it, as ``--json`` prints it.
    """
    lines = [f"Written: {path}"]
    for fit in (one["fits"][0] for one in asked):
        if not fit["complete"]:
            lines += [*_wrapped(f"Of the {fit['kind']}, {_part(fit)}"), *_gaps(fit)]
    if lacking:
        lines.append("Still to be filled in, from papers that benchkit can't read:")
        lines += [line for text in lacking for line in _wrapped(f"  {text}")]
    return [
        *lines,
        "Next, with nothing connected to meter and supply:",
        f"  benchkit instruments check --bench {_typed(path)}",
    ]


def _first(several: Sequence[Table], kind: str) -> str:
    """Return the address of the instrument that answers a profile of this kind best."""
    ranked = [
        (len(fit["unanswered"]), number, str(one["address"]))
        for number, one in enumerate(several)
        for fit in one["fits"][:1]
        if fit["kind"] == kind
    ]
    return min(ranked)[2] if ranked else ""


class Countdown:
    """One line that is written over: what is being waited for, and how long it may still take.

    On anything but a terminal it says each new thing once, on a line of its own.

    Parameters
    ----------
    out : text stream
        Not the one that results go to.
    """

    def __init__(self, out: TextIO) -> None:
        self._out = out
        self._moving = out.isatty()
        self._what = ""
        self._shown = ""

    def __call__(self, what: str, left_s: float) -> None:
        """Show it; ten times a second is not too often."""
        text = f"{what}: up to {left_s:.0f} s" if left_s > 0.5 else f"{what}: late, still waiting"
        if self._moving and text != self._shown:
            self._out.write(f"\r{text:<{len(self._shown)}}")
            self._out.flush()
            self._shown = text
        elif not self._moving and what != self._what:
            self._out.write(text + "\n")
        self._what = what

    def clear(self) -> None:
        """Take the line away."""
        if self._shown:
            self._out.write("\r" + " " * len(self._shown) + "\r")
            self._out.flush()
            self._shown = ""


def asked_yes(lines: Sequence[str]) -> bool:
    """Say `lines`, and tell whether the whole word ``yes`` was typed; the end of the input is a no."""
    click.echo("\n".join(lines), err=True)
    click.echo("Type yes to switch it on, anything else to leave it off: ", nl=False, err=True)
    answer = sys.stdin.readline().strip().lower()
    click.echo("", err=True)
    return answer == "yes"


def _wrapped(text: str, below: str = "") -> list[str]:
    """Break a text between words at `COLUMNS`: never inside a word, a number, or between a number and its unit.

    It goes on under `below`, or two columns further in than it began.
    """
    begin = text[: len(text) - len(text.lstrip(" "))]
    words = _NUMBER_AND_UNIT.sub(lambda match: match[0].replace(" ", "\0"), text.removeprefix(begin))
    broken = textwrap.wrap(
        words,
        COLUMNS,
        initial_indent=begin,
        subsequent_indent=below or begin + "  ",
        break_long_words=False,
        break_on_hyphens=False,
    )
    return [line.replace("\0", " ") for line in broken]


def _typed(text: str) -> str:
    """Return a word as it has to be typed into a shell."""
    return shlex.quote(text)
