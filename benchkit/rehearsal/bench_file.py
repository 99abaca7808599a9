"""The bench file that belongs to a rehearsal's bench: its addresses, and how accurate its instruments are."""

from __future__ import annotations

import json

from benchkit.measure.readings import FUNCTIONS as METER_UNITS
from benchkit.rehearsal.meter import SPECIFICATION
from benchkit.rehearsal.supply import AMP_STEP, MOST_AMPS, MOST_VOLTS, READ_AMPS, READ_VOLTS, VOLT_STEP

_NO_DRIFT = "calibration_due = 9999-12-31  # simulated: it does not age"


def bench_text(meter_address: str, supply_address: str) -> str:
    """Return the TOML of a bench file for the simulated instruments.

    Parameters
    ----------
    meter_address, supply_address : str
        As VISA writes them.

    Returns
    -------
    str
        With an accuracy row for each range of the meter and for the supply's own readings: the specifications inside
        which their errors were drawn.
    """
    lines = [
        "[bench]",
        "format = 1",
        'name = "rehearsal"',
        "",
        "[meter]",
        f"address = {json.dumps(meter_address)}",
        'profile = "scpi-meter"',
        'input_resistance = "10 Mohm"',
        _NO_DRIFT,
    ]
    for function, rows in SPECIFICATION.rows.items():
        unit = METER_UNITS[function]
        for row in rows:
            lines += ["", "[[meter.accuracy]]", f"function = {json.dumps(function)}"]
            lines += [f'range = "{row.full_scale:.10g} {unit}"', f"percent_of_reading = {row.percent_of_reading!r}"]
            if row.percent_of_range:
                lines.append(f"percent_of_range = {row.percent_of_range!r}")
            if row.floor:
                lines.append(f'floor = "{row.floor:.10g} {unit}"')
    lines += ["", "[supply]", f"address = {json.dumps(supply_address)}", 'profile = "scpi-supply"', _NO_DRIFT]
    readings = (
        ("dc volts", "V", MOST_VOLTS, READ_VOLTS, VOLT_STEP),
        ("dc current", "A", MOST_AMPS, READ_AMPS, AMP_STEP),
    )
    for function, unit, most, (share, floor), step in readings:
        lines += ["", "[[supply.accuracy]]", f"function = {json.dumps(function)}", f'range = "{most:.10g} {unit}"']
        lines += [f"percent_of_reading = {100.0 * share:.10g}", "counts = 2", f'resolution = "{step:.10g} {unit}"']
        lines.append(f'floor = "{floor:.10g} {unit}"')
    return "\n".join([*lines, ""])
