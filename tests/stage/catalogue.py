"""A catalogue of stages: topology x feed x trimmer x number of pairs, single-supply and pnp-spreader ones among them.

Every design is a design file's text, put together from the tables below, and passes the same checks as any file. The
values are invented, of the size that such stages have: about 8 mA through the spreader (20 mA in a single follower),
some 20 mV across each emitter resistor when warm. The collector-base arm of each (`ARMS`) was found by the model
itself, as the resistance at which the nominal unit, warm, meets its target; the arms with a trimmer are divided so that
this lies in the middle of its travel. `python -m tests.stage.catalogue` prints the table again.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from functools import cache
from pathlib import Path

from benchkit.stage.design import Design, parse_design
from tests.stage.catalogue_arms import ARMS

LOWER_OHM = 800.0
"""Base-emitter arm, trimmer included, at the target."""
TRACK_SHARE = 0.25
"""Track of the trimmer as a share of the arm that it stands in, or of the base-emitter arm for one that divides."""

TOPOLOGIES = ("single-emitter-follower", "double-emitter-follower", "triple-emitter-follower",
              "complementary-feedback-pair")  # fmt: skip
SHORT = dict(zip(TOPOLOGIES, ("single", "double", "triple", "feedback"), strict=True))
FEEDS = ("source servo", "resistor servo", "resistor resistor")
TRIMMERS = ("lower", "upper", "between", "none")
WIRINGS = ("series", "tied")


@dataclass(frozen=True, kw_only=True)
class Wanted:
    """What a design of the catalogue is to be."""

    topology: str
    feed: str
    trimmer: str
    wiring: str = "series"
    pairs: int = 1
    stopper: bool = False
    to_output: bool = False
    single_supply: bool = False
    pnp_spreader: bool = False
    collector_resistor: bool = False

    @property
    def name(self) -> str:
        """Short name, unique in the catalogue."""
        words = [SHORT[self.topology], self.feed, self.trimmer]
        if self.trimmer != "none":
            words.append(self.wiring)
        words.append(f"{self.pairs}")
        words += ["stopper"] * self.stopper + ["to output"] * self.to_output
        words += ["one supply"] * self.single_supply + ["pnp spreader"] * self.pnp_spreader
        words += ["collector resistor"] * self.collector_resistor
        return " ".join(words)


def text(wanted: Wanted, arm_ohm: float | None = None) -> str:
    """The design file; `arm_ohm` is the collector-base arm at the target (by default that of `ARMS`)."""
    single = wanted.topology == "single-emitter-follower"
    full_v = 20.0 if single else 30.0
    feed_ohm = (1.0e3 if single else 3.6e3) if not wanted.single_supply else (0.91e3 if single else 3.3e3)
    upper_ohm = arm_ohm if arm_ohm is not None else ARMS[arm_key(wanted)]
    parts = [
        f'[design]\nformat = 1\nname = "{wanted.name}"\nrevision = "A"\n',
        _rails(wanted, full_v),
        _feed(wanted, feed_ohm, 0.02 if single else 0.008),
        _spreader(wanted, upper_ohm),
        _output(wanted),
        f'[target]\nemitter_drop = "20 mV"\ntolerance = "{30 if wanted.trimmer == "none" else 10} %"\nwhen = "warm"\n',
        THERMAL if not single else THERMAL.replace('driver_tracking = 0.4\ndriver_to_ambient = "60 K/W"\n', ""),
        DEVICES,
    ]
    return "\n".join(parts)


def _rails(wanted: Wanted, full_v: float) -> str:
    if wanted.single_supply:
        return (
            f'[rails]\npositive = "{2.0 * full_v:g} V"\nnegative = "0 V"\nbleed = "15 kohm 5 %"\n'
            'other_positive = "4 mA 10 %"\n'
        )
    return (
        f'[rails]\npositive = "{full_v:g} V"\nnegative = "-{full_v:g} V"\nlocal_capacitors = "100 uF"\n'
        'bleed = "10 kohm 5 %"\nother_positive = "4 mA 10 %"\nother_negative = "4 mA 10 %"\n'
    )


def _feed(wanted: Wanted, ohm: float, amps: float) -> str:
    upper, lower = wanted.feed.split()
    resistor = f"{ohm:g} ohm 1 %"
    lines = ["[feed]", f'upper = "{resistor if upper == "resistor" else f"{amps * 1e3:g} mA 5 %"}"']
    lines.append(f'lower = "{resistor if lower == "resistor" else "servo"}"')
    if lower == "servo":
        lines += [f'max_current = "{3e3 * amps:g} mA"', 'works_from = "6 V"', 'settles_after = "2 s"']
    return "\n".join(lines) + "\n"


def _spreader(wanted: Wanted, upper_ohm: float) -> str:
    arms = {"upper": upper_ohm, "lower": LOWER_OHM}
    track = TRACK_SHARE * arms.get(wanted.trimmer, LOWER_OHM)
    if wanted.trimmer == "between" and wanted.wiring == "tied":
        arms["lower"] -= 0.5 * track
    elif wanted.trimmer == "between":
        arms = {arm: ohm - 0.5 * track for arm, ohm in arms.items()}
    elif wanted.trimmer != "none":
        arms[wanted.trimmer] -= 0.5 * track
    lines = ["[spreader]", f'transistor = "{"pnp-small" if wanted.pnp_spreader else "npn-small"}"']
    lines += [f'{arm} = "{ohm:.5g} ohm {"0.1 %" if wanted.trimmer == "none" else "1 %"}"' for arm, ohm in arms.items()]
    if wanted.collector_resistor:
        lines.append('collector_resistor = "22 ohm 5 %"')
    if wanted.trimmer != "none":
        lines += ["", "[spreader.trimmer]", f'value = "{track:.5g} ohm 10 %"', f'arm = "{wanted.trimmer}"',
                  'end_resistance = "1 ohm"', "turns = 12", 'raises_bias = "clockwise"',
                  f'wiring = "{wanted.wiring}"']  # fmt: skip
    return "\n".join(lines) + "\n"


def _output(wanted: Wanted) -> str:
    topology = wanted.topology
    feedback, single = topology == "complementary-feedback-pair", topology == "single-emitter-follower"
    kinds = ("npn-medium", "pnp-medium") if single else ("npn-power", "pnp-power")
    upper, lower = kinds[::-1] if feedback else kinds
    lines = ["[output]", f'topology = "{topology}"', f"pairs = {wanted.pairs}", f'upper = "{upper}"',
             f'lower = "{lower}"']  # fmt: skip
    if not single:
        ohm = "150" if feedback else "220"
        lines += ['driver_upper = "npn-driver"', 'driver_lower = "pnp-driver"', f'driver_resistor = "{ohm} ohm 5 %"']
    if topology == "triple-emitter-follower":
        lines += ['predriver_upper = "npn-driver"', 'predriver_lower = "pnp-driver"',
                  'predriver_resistor = "1.5 kohm 5 %"']  # fmt: skip
    if wanted.to_output:
        lines.append('driver_resistor_to = "output"')
    lines.append(f'emitter_resistor = "{"1 ohm" if single else "0.22 ohm"} 1 %"')
    if wanted.stopper:
        lines.append('base_stopper = "4.7 ohm 5 %"')
    lines += [f'rest = "{"50 %" if wanted.single_supply else "0 V"}"', 'offset = "20 mV"']
    return "\n".join(lines) + "\n"


THERMAL = """[thermal]
ambient = "25 degC"
heatsink = "0.5 K/W"
heatsink_capacity = "600 J/K"
junction_to_heatsink = "1.2 K/W"
spreader_tracking = 0.8
driver_tracking = 0.4
driver_to_ambient = "60 K/W"
spreader_to_ambient = "100 K/W"
spreader_lag = "30 s"
max_heatsink = "70 degC"
"""

DEVICES = (Path(__file__).parent / "catalogue_devices.toml").read_text(encoding="utf-8")


def wanted() -> Iterator[Wanted]:
    """Everything in the catalogue: the full product, wirings and stoppers mixed in, then the special ones."""
    number = 0
    for topology in TOPOLOGIES:
        for feed in FEEDS:
            for trimmer in TRIMMERS:
                for pairs in (1,) if topology == "complementary-feedback-pair" else (1, 2, 3):
                    wiring = WIRINGS[number % 2] if trimmer != "none" else "series"
                    many = topology in ("double-emitter-follower", "triple-emitter-follower")
                    yield Wanted(
                        topology=topology, feed=feed, trimmer=trimmer, wiring=wiring, pairs=pairs,
                        stopper=number % 4 >= 2, to_output=many and number % 5 == 3,
                    )  # fmt: skip
                    number += 1
    for topology in TOPOLOGIES:
        for trimmer, feed in zip(TRIMMERS, (*FEEDS, FEEDS[1]), strict=True):
            yield Wanted(
                topology=topology, feed=feed, trimmer=trimmer, wiring="tied" if trimmer == "upper" else "series",
                single_supply=True, stopper=trimmer != "none",
            )  # fmt: skip
    for trimmer in TRIMMERS[:3]:
        yield Wanted(
            topology=TOPOLOGIES[1], feed="resistor servo", trimmer=trimmer, pnp_spreader=True,
            wiring="tied" if trimmer == "between" else "series", collector_resistor=trimmer == "upper",
        )  # fmt: skip
    yield Wanted(topology=TOPOLOGIES[3], feed="source servo", trimmer="upper", wiring="tied", pnp_spreader=True)


FEW = (
    "single resistor resistor lower series 1",
    "double source servo lower tied 2 stopper",
    "double resistor servo between tied 1 stopper pnp spreader collector resistor",
    "triple source servo upper series 1 stopper",
    "triple resistor servo between series 3 stopper to output",
    "feedback source servo lower series 1 stopper",
    "feedback resistor resistor none 1",
    "double resistor servo upper tied 1 stopper one supply",
)
"""Topology, feed, trimmer, wiring and the rest, each once or more."""


def catalogue() -> dict[str, Design]:
    """Every design by its name."""
    return {one.name: _made(one) for one in (*wanted(), *_extra())}


def few() -> dict[str, Design]:
    """Eight designs that hold every topology, feed, trimmer arm and wiring, one to three pairs, once or more."""
    known = {one.name: one for one in (*wanted(), *_extra())}
    return {name: _made(known[name]) for name in FEW}


def _extra() -> Iterator[Wanted]:
    yield Wanted(topology=TOPOLOGIES[0], feed=FEEDS[2], trimmer="lower")
    yield Wanted(topology=TOPOLOGIES[1], feed=FEEDS[0], trimmer="lower", wiring="tied", pairs=2, stopper=True)
    yield Wanted(topology=TOPOLOGIES[1], feed=FEEDS[1], trimmer="between", wiring="tied", stopper=True,
                 pnp_spreader=True, collector_resistor=True)  # fmt: skip
    yield Wanted(topology=TOPOLOGIES[2], feed=FEEDS[0], trimmer="upper", stopper=True)
    yield Wanted(topology=TOPOLOGIES[2], feed=FEEDS[1], trimmer="between", pairs=3, stopper=True, to_output=True)
    yield Wanted(topology=TOPOLOGIES[3], feed=FEEDS[0], trimmer="lower", stopper=True)
    yield Wanted(topology=TOPOLOGIES[3], feed=FEEDS[2], trimmer="none")
    yield Wanted(topology=TOPOLOGIES[1], feed=FEEDS[1], trimmer="upper", wiring="tied", stopper=True,
                 single_supply=True)  # fmt: skip


@cache
def _made(one: Wanted) -> Design:
    return parse_design(text(one), f"{one.name}.toml")


def arm_key(one: Wanted) -> str:
    """What the collector-base arm depends on: everything but the trimmer."""
    return replace(one, trimmer="none", wiring="series").name.replace(" none ", " ", 1)


def found_arm(one: Wanted) -> float:
    """Collector-base arm (ohm, to five digits) at which the nominal unit, warm, meets its target."""
    from benchkit.stage.draws import nominal
    from benchkit.stage.operate import solve_units
    from benchkit.stage.reach import full_rails

    track_ohm, fixed_ohm = 20e3, 1.0
    probe = text(replace(one, trimmer="upper", wiring="series"), 1e4)
    begin, end = probe.index("[spreader]\n"), probe.index("[output]\n")
    spreader = (
        f'[spreader]\ntransistor = "{"pnp-small" if one.pnp_spreader else "npn-small"}"\n'
        f'upper = "{fixed_ohm} ohm"\nlower = "{LOWER_OHM} ohm"\n'
        + ('collector_resistor = "22 ohm 5 %"\n' if one.collector_resistor else "")
        + f'[spreader.trimmer]\nvalue = "{track_ohm} ohm"\narm = "upper"\nturns = 1\nraises_bias = "clockwise"\n'
        'wiring = "series"\n'
    )
    design = parse_design(probe[:begin] + spreader + probe[end:])
    solved = solve_units(design, nominal(design), full_rails(design), loading="none")
    assert solved.converged[0], one.name
    assert solved.unclipped is not None
    return float(f"{fixed_ohm + track_ohm * float(solved.unclipped[0]):.5g}")


def main() -> None:
    """Print the table of collector-base arms."""
    for one in {arm_key(one): one for one in (*wanted(), *_extra())}.values():
        print(f'    "{arm_key(one)}": {found_arm(one):g},')


if __name__ == "__main__":
    main()
