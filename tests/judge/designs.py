"""Designs for the tests of the judge: the demonstration design, with parts of it exchanged."""

from __future__ import annotations

from functools import lru_cache
from pathlib import Path

from benchkit.measure.accuracy import BENCH_METER, Accuracy
from benchkit.measure.readings import Reading
from benchkit.measure.uncertainty import make_reading
from benchkit.stage.design import Design, parse_design

TERN = Path(__file__).parents[2] / "procedures" / "designs" / "tern-40.toml"
PERFECT = 0.0


@lru_cache(maxsize=32)
def tern(*changes: tuple[str, str]) -> Design:
    """The demonstration design with texts exchanged; each must be there."""
    text = TERN.read_text(encoding="utf-8")
    for old, new in changes:
        assert old in text, old
        text = text.replace(old, new)
    return parse_design(text, "tern-40.toml")


def taken(
    point: str,
    value: float,
    *,
    unit: str = "V",
    function: str = "dc volts",
    accuracy: Accuracy = BENCH_METER,
    u: float | None = None,
    range_: float | None = None,
) -> Reading:
    """A reading of a good meter, or with a stated uncertainty."""
    if u is None:
        return make_reading(point, value, unit, function=function, accuracy=accuracy, range=range_)
    return Reading(point=point, value=value, unit=unit, standard_uncertainty=u, meter="stated", function=function)


def by_point(*readings: Reading) -> dict[str, Reading]:
    """Readings by their point."""
    return {reading.point: reading for reading in readings}
