"""The bench file that belongs to a rehearsal's bench: its addresses, and how accurate its instruments are."""

from __future__ import annotations

import json

from benchkit.rehearsal.meter import SPECIFICATION


def bench_text(meter_address: str, supply_address: str) -> str:
    """Return the TOML of a bench file for the simulated instruments.

    Parameters
    ----------
    meter_address, supply_address : str
        As VISA writes them.

    Returns
    -------
    str
        With one accuracy row for each range of the meter: the specification inside which its errors were drawn.
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
    ]
    for function, rows in SPECIFICATION.rows.items():
        unit = {"ac volts": "V", "dc volts": "V", "dc current": "A", "diode": "V", "temperature": "degC"}.get(
            function, "ohm"
        )
        for row in rows:
            lines += ["", "[[meter.accuracy]]", f"function = {json.dumps(function)}"]
            lines += [f'range = "{row.full_scale:.10g} {unit}"', f"percent_of_reading = {row.percent_of_reading!r}"]
            if row.percent_of_range:
                lines.append(f"percent_of_range = {row.percent_of_range!r}")
            if row.floor:
                lines.append(f'floor = "{row.floor:.10g} {unit}"')
    lines += ["", "[supply]", f"address = {json.dumps(supply_address)}", 'profile = "scpi-supply"', ""]
    return "\n".join(lines)
