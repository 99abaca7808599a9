"""Start the keeper or its stand-by; benchkit does this by itself.

``python -m benchkit.keeper [--logs FOLDER] [--lifeline NUMBER]``, ``--off-only``, or
``--stand-by [--lifeline NUMBER] [--keeper NUMBER]``.
"""

from __future__ import annotations

import argparse
import os
import sys
from pathlib import Path

from benchkit.keeper.pipes import take_standard_streams


def main() -> None:
    """Run the process and end it, also when one of its threads is stuck.

    PyVISA imports numpy where it finds it, for transfers of whole arrays that nobody makes here.  That would be half of
    the time that it takes to get the bench ready, so that in this process numpy can't be found.
    """
    sys.modules["numpy"] = None  # type: ignore[assignment]
    parser = argparse.ArgumentParser("python -m benchkit.keeper", description="benchkit starts it by itself")
    parser.add_argument("--logs", type=Path)
    parser.add_argument("--lifeline", type=int)
    parser.add_argument("--keeper", type=int)
    parser.add_argument("--off-only", action="store_true")
    parser.add_argument("--stand-by", action="store_true")
    given = parser.parse_args()
    source, sink = take_standard_streams()
    status = 0
    if given.off_only:
        from benchkit.keeper.off_only import switch_off
        from benchkit.keeper.protocol import decode, encode

        with os.fdopen(source, "rb") as pipe:
            result = switch_off(decode(pipe.readline()))
        os.write(sink, encode(result))
    elif given.stand_by:
        from benchkit.keeper.stand_by import StandBy

        stand_by = StandBy(source, sink, given.lifeline, given.keeper)
        stand_by.warm_up()
        stand_by.run()
    else:
        from benchkit.keeper.process import Keeper

        status = Keeper(source, sink, given.logs, given.lifeline).run()
    sys.stderr.flush()
    os._exit(status)


if __name__ == "__main__":
    main()
