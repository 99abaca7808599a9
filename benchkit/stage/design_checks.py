"""What a design file must make sense of, beyond the shape of its keys.

Each check names the dotted key that a person would change. The order is: devices, topology, spreader, feeds, target,
ratings, and last whether this version has a model of the stage. A target outside the trimmer's reach needs a solved
circuit and stands in `benchkit.stage.reach`.
"""

from __future__ import annotations

from collections.abc import Iterator

from benchkit.errors import FileError
from benchkit.quantities import show
from benchkit.stage.design import _MAY_BE_ZERO, DEVICE_PARAMETERS, Design, Device

_NEEDED = {
    "single-emitter-follower": (),
    "double-emitter-follower": ("driver_upper", "driver_lower", "driver_resistor"),
    "triple-emitter-follower": (
        "driver_upper", "driver_lower", "driver_resistor", "predriver_upper", "predriver_lower", "predriver_resistor",
    ),
    "complementary-feedback-pair": ("driver_upper", "driver_lower", "driver_resistor"),
}  # fmt: skip
_STAGE_KEYS = (
    "driver_upper", "driver_lower", "driver_resistor", "predriver_upper", "predriver_lower", "predriver_resistor",
)  # fmt: skip
RATED_KINDS = ("output", "driver", "predriver", "emitter", "spreader", "feed", "stopper")


def check_sense(design: Design, file_name: str) -> None:
    """Raise on the first thing in a design that can't be meant.

    Parameters
    ----------
    design : Design
        With every key right by itself.
    file_name : str
        What the message calls the file.

    Raises
    ------
    FileError
        With the dotted key.
    """
    from benchkit.stage.topologies import check_modelled

    for finding in _findings(design):
        key, came, expected, next_step = finding
        raise FileError(file_name, key, came, expected, next_step)
    check_modelled(design, file_name)


_Finding = tuple[str, str, str, str]


def _findings(design: Design) -> Iterator[_Finding]:
    for name, device in design.device.items():
        yield from _device(name, device)
    yield from _places(design)
    yield from _topology(design)
    yield from _spreader(design)
    yield from _feeds(design)
    yield from _target(design)
    yield from _ratings(design)


def _device(name: str, device: Device) -> Iterator[_Finding]:
    table = f"device.{name}"
    if not device.parameters.get("IS"):
        yield f"{table}.parameters.IS", "the saturation current is missing", "IS in amperes, such as 2e-14", ""
    for parameter, value in device.parameters.items():
        key = f"{table}.parameters.{parameter}"
        if parameter not in DEVICE_PARAMETERS:
            yield key, "this parameter is not known", "one of " + ", ".join(DEVICE_PARAMETERS), ""
        elif value < 0 or (value == 0 and parameter not in _MAY_BE_ZERO):
            yield key, f"{value:g} came", "a number above zero", ""
    for parameter in device.spread:
        if parameter not in device.parameters:
            key = f"{table}.spread.{parameter}"
            yield key, "a spread without its parameter", f'"{parameter}" in {table}.parameters too', ""


def _places(design: Design) -> Iterator[_Finding]:
    """Every named device exists and has the polarity of its place."""
    feedback = design.output.topology == "complementary-feedback-pair"
    places: list[tuple[str, str | None, str]] = [
        ("spreader.transistor", design.spreader.transistor, ""),
        ("output.upper", design.output.upper, "pnp" if feedback else "npn"),
        ("output.lower", design.output.lower, "npn" if feedback else "pnp"),
        ("output.driver_upper", design.output.driver_upper, "npn"),
        ("output.driver_lower", design.output.driver_lower, "pnp"),
        ("output.predriver_upper", design.output.predriver_upper, "npn"),
        ("output.predriver_lower", design.output.predriver_lower, "pnp"),
    ]
    for key, name, polarity in places:
        if name is None:
            continue
        device = design.device.get(name)
        if device is None:
            named = ", ".join(f'"{known}"' for known in design.device) or "none"
            yield key, f'"{name}" has no device table', f"a table [device.{name}] (there are: {named})", ""
        elif polarity and device.polarity != polarity:
            yield key, f'"{name}" is a {device.polarity}', f"a {polarity} in this place", ""


def _topology(design: Design) -> Iterator[_Finding]:
    topology = design.output.topology
    for key in _STAGE_KEYS:
        given = getattr(design.output, key) is not None
        if key in _NEEDED[topology] and not given:
            yield f"output.{key}", "the key is missing", f"it, because this is a {topology}", ""
        if key not in _NEEDED[topology] and given:
            yield (
                f"output.{key}",
                f"the key has no meaning in a {topology}",
                "a topology with that part, or no such key",
                "",
            )
    if topology == "complementary-feedback-pair" and design.output.pairs != 1:
        yield "output.pairs", f"{design.output.pairs} came", "1 in a complementary feedback pair", ""
    if design.output.driver_resistor_to == "output" and topology in (
        "single-emitter-follower",
        "complementary-feedback-pair",
    ):
        yield "output.driver_resistor_to", f"it has no meaning in a {topology}", "no such key", ""
    if design.thermal.driver_tracking is None and topology != "single-emitter-follower":
        yield (
            "thermal.driver_tracking",
            "the key is missing",
            "the share of the heat sink's rise that the drivers see",
            "",
        )
    if design.single_supply and design.rails.other_negative is not None:
        yield "rails.other_negative", "a single-supply stage has no negative rail", "no such key", ""
    rest_v = design.rest_v(design.rails.positive_v, design.rails.negative_v)
    if not design.rails.negative_v < rest_v < design.rails.positive_v:
        yield "output.rest", f"{show(rest_v, 'V')} came", "a voltage between the rails", ""


def _spreader(design: Design) -> Iterator[_Finding]:
    trimmer = design.spreader.trimmer
    if trimmer is None:
        return
    smallest = trimmer.value.value * (1.0 - trimmer.value.fraction)
    if 2.0 * trimmer.end_resistance_ohm >= smallest:
        yield (
            "spreader.trimmer.end_resistance",
            f"{show(trimmer.end_resistance_ohm, 'ohm')} came",
            f"less than half of the smallest track ({show(smallest, 'ohm')})",
            "",
        )


def _feeds(design: Design) -> Iterator[_Finding]:
    if design.feed.upper.kind == "servo":
        yield "feed.upper", '"servo" came', "a current source or a resistor; the servo stands below", ""
    if design.feed.lower.kind == "source":
        yield "feed.lower", "a current source came", '"servo", or a resistor to the rail', ""
    if design.feed.lower.kind != "servo":
        for key in ("max_current", "works_from", "settles_after"):
            given = getattr(
                design.feed, {"max_current": "max_current_a", "works_from": "works_from_v"}.get(key, f"{key}_s")
            )
            if given is not None:
                yield f"feed.{key}", "the key belongs to a servo", 'feed.lower = "servo", or no such key', ""
        return
    full_v = min(design.rails.positive_v, abs(design.rails.negative_v) or design.rails.positive_v)
    if design.feed.works_from_v is not None and design.feed.works_from_v > full_v:
        came = show(design.feed.works_from_v, "V")
        yield "feed.works_from", f"{came} came", f"no more than the rails' {show(full_v, 'V')}", ""
    if design.feed.upper.kind == "source":
        upper_a = design.feed.upper.value.value * (1.0 + design.feed.upper.value.fraction)
        if design.servo_max_a <= upper_a:
            came = show(design.servo_max_a, "A")
            yield "feed.max_current", f"{came} came", f"more than the upper feed's {show(upper_a, 'A')}", ""


def _target(design: Design) -> Iterator[_Finding]:
    target = design.target
    given = [
        key
        for key, value in (
            ("emitter_drop", target.emitter_drop_v),
            ("quiescent_current", target.quiescent_current_a),
            ("optimum", target.optimum),
        )
        if value is not None
    ]
    if len(given) != 1:
        came = " and ".join(given) if given else "no target"
        yield "target", f"{came} came", "exactly one of emitter_drop, quiescent_current, optimum", ""
    if design.thermal.max_heatsink_c <= design.thermal.ambient_c:
        came = show(design.thermal.max_heatsink_c, "degC")
        yield (
            "thermal.max_heatsink",
            f"{came} came",
            f"more than the ambient {show(design.thermal.ambient_c, 'degC')}",
            "",
        )


def _ratings(design: Design) -> Iterator[_Finding]:
    for name in design.ratings:
        if name.partition(".")[0] not in RATED_KINDS:
            known = ", ".join(RATED_KINDS)
            yield f"ratings.{name}", "no such part", f'a part or a kind of part ("output.upper"; kinds: {known})', ""
