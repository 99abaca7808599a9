"""The commands about instruments: find, identify, write, check."""

from __future__ import annotations

import sys
from pathlib import Path

import click

from benchkit.cli.options import Group, baud_option, examples, print_json, visa_option
from benchkit.errors import EntryError


@click.group(cls=Group)
def instruments() -> None:
    """Find instruments, ask who they are, write a bench file, try it.

    In this order: find, identify, write, check. Each says what to type next.
    """


@instruments.command(
    "find",
    epilog=examples(
        "benchkit instruments find",
        "benchkit instruments find --network",
    ),
)
@click.option("--network", is_flag=True, help="Ask the local network too, who speaks VXI-11 or HiSLIP.")
@visa_option
@click.option("--wait", "wait_s", type=click.FloatRange(0.5, 60.0), default=8.0, show_default=True, metavar="S",
              help="How long each place may take, in seconds.")  # fmt: skip
@click.option("--json", "as_json", is_flag=True, help="For programs.")
def instruments_find(network: bool, visa: str, wait_s: float, as_json: bool) -> int:
    """List what can be found: serial ports, USB instruments, and what answers on the network when asked for.

    Nothing is opened. An instrument need not be found to be used: its address can always be typed.
    """
    from benchkit.instruments.discovery import discover

    findings = discover(network=network, library=visa or "@py", wait_s=wait_s).as_json()
    if as_json:
        print_json(findings)
    else:
        from benchkit.ui.instruments_text import found_lines

        click.echo("\n".join(found_lines(findings, network=network)))
    return 0


@instruments.command(
    "identify",
    epilog=examples(
        "benchkit instruments identify 192.168.1.20 TCPIP::192.168.1.21::5025::SOCKET",
        "benchkit instruments identify /dev/ttyUSB0 --baud 9600 --baud 19200",
    ),
)
@click.argument("addresses", nargs=-1, required=True, metavar="ADDRESS...")
@click.option("--profile", "profiles", multiple=True, metavar="NAME|FILE",
              help="A profile to try; may be given again. All that come along if left out.")  # fmt: skip
@baud_option
@visa_option
@click.option("--json", "as_json", is_flag=True, help="For programs: one object an instrument.")
def instruments_identify(
    addresses: tuple[str, ...], profiles: tuple[str, ...], bauds: tuple[int, ...], visa: str, as_json: bool
) -> int:
    """Ask instruments who they are, and which profile's questions they answer.

    ADDRESS is as VISA writes it; a host alone or a serial port will do. No output is switched, no voltage and no limit
    is set. A meter's function or a supply's selected output may change, and what an instrument doesn't understand may
    make it beep. The exit status is 3 when one says no name, or answers no profile's questions.
    """
    from benchkit.instruments.identified import addresses_for, candidates
    from benchkit.instruments.identifying import identify

    for address in addresses:
        addresses_for(address)
    tried = candidates(profiles)
    found = []
    for address in addresses:
        one = identify(address, tried, library=visa or "@py", bauds=bauds, say=_aside)
        found.append(one.as_json())
        if as_json:
            print_json(found[-1])
    if not as_json:
        from benchkit.ui.instruments_text import identified_lines

        click.echo("\n".join(identified_lines(found, visa)))
    return 0 if all(one["fits"] for one in found) else 3


@instruments.command(
    "write",
    epilog=examples(
        "benchkit instruments write bench.toml --meter 192.168.1.20 --supply 192.168.1.21",
        'benchkit instruments write bench.toml --meter /dev/ttyUSB0 --baud 19200 --name "bench 2"',
    ),
)
@click.argument("path", type=click.Path(path_type=Path, dir_okay=False), metavar="FILE")
@click.option("--meter", default="", metavar="ADDRESS", help="Where the meter answers.")
@click.option("--supply", default="", metavar="ADDRESS", help="Where the supply answers.")
@click.option("--profile", "profiles", multiple=True, metavar="NAME|FILE",
              help="A profile to try; may be given again. All that come along if left out.")  # fmt: skip
@baud_option
@visa_option
@click.option("--name", default="my bench", show_default=True, metavar="TEXT", help="What the bench is called.")
@click.option("--force", is_flag=True, help="Overwrite a file that is there.")
def instruments_write(
    path: Path,
    meter: str,
    supply: str,
    profiles: tuple[str, ...],
    bauds: tuple[int, ...],
    visa: str,
    name: str,
    force: bool,
) -> int:
    """Write a starting bench file: what the instruments answer is filled in, each key is explained.

    Without --meter a person reads the meter, without --supply a person sets the supply.
    """
    from benchkit.instruments import starting_file
    from benchkit.instruments.identifying import identify_as
    from benchkit.ui.instruments_text import written_lines

    if not meter and not supply:
        raise EntryError(
            "Neither --meter nor --supply came", "at least one address", "Find them with benchkit instruments find"
        )
    starting_file.check_place(path, force=force)
    asked = {
        kind: identify_as(kind, address, profiles, library=visa or "@py", bauds=bauds, say=_aside)
        for kind, address in (("meter", meter), ("supply", supply))
        if address
    }
    starting = starting_file.Starting(
        name=name, library=visa or "@py", meter=asked.get("meter"), supply=asked.get("supply")
    )
    starting_file.write_starting_file(path, starting, force=force)
    known = [one.as_json() for one in asked.values()]
    click.echo("\n".join(written_lines(str(path), starting_file.still_to_fill_in(starting), known)))
    return 0


@instruments.command(
    "check",
    epilog=examples(
        "benchkit instruments check --bench bench.toml",
        "benchkit instruments check --bench bench.toml --no-power",
    ),
)
@click.option("--bench", "bench_path", type=click.Path(path_type=Path), required=True, metavar="FILE",
              help="The bench file to try.")  # fmt: skip
@visa_option
@click.option("--no-power", is_flag=True, help="Don't offer to switch the supply on.")
@click.option("--json", "as_json", is_flag=True, help="For programs; the question about the supply is still asked.")
def instruments_check(bench_path: Path, visa: str, no_power: bool, as_json: bool) -> int:
    """Try a bench with nothing connected: a reading of each function, the supply's settings, the supply at 1 V.

    The supply is switched on only after a typed yes, into open circuit, with both outputs at 1 V and a limit of 10 mA,
    for less than two seconds. It is switched off again, and that is confirmed, on every way out; only an outright kill
    leaves it on, at 1 V and 10 mA.
    """
    from benchkit.instruments import checking, open_circuit
    from benchkit.instruments.bench import load_bench
    from benchkit.ui import instruments_text

    bench = load_bench(bench_path, visa=visa)
    _aside("Nothing may be connected to the meter or to the supply.")
    countdown = instruments_text.Countdown(sys.stderr)

    def yes(found: checking.SupplyChecked) -> bool:
        countdown.clear()
        most = (open_circuit.TEST_V, open_circuit.TEST_A, open_circuit.MOST_ON_S)
        lines = instruments_text.before_power(found.name, *most)
        return instruments_text.asked_yes(lines)

    checked = checking.check_bench(bench, yes=None if no_power else yes, progress=countdown)
    try:
        countdown.clear()
        if as_json:
            print_json(checked.as_json())
        else:
            click.echo("\n".join(instruments_text.checked_lines(checked.as_json(), str(bench_path))))
    except OSError:
        # Whoever closed the terminal can't be told; the supply is off all the same.
        if not checked.stopped:
            raise
    return checked.exit_status


def _aside(text: str) -> None:
    click.echo(text, err=True)
