"""Start the keeper: ``python -m benchkit.keeper [--off-only] [--logs FOLDER]``; benchkit does this by itself."""

from __future__ import annotations

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
    arguments = sys.argv[1:]
    if arguments and arguments[0] == "--off-only":
        from benchkit.keeper.off_only import switch_off
        from benchkit.keeper.protocol import decode, encode

        source, sink = take_standard_streams()
        with os.fdopen(source, "rb") as pipe:
            result = switch_off(decode(pipe.readline()))
        os.write(sink, encode(result))
        os._exit(0)
    from benchkit.keeper.process import Keeper

    log_dir = Path(arguments[1]) if len(arguments) == 2 and arguments[0] == "--logs" else None
    if arguments and log_dir is None:
        sys.exit("python -m benchkit.keeper [--off-only] [--logs FOLDER]; benchkit starts it by itself")
    source, sink = take_standard_streams()
    status = Keeper(source, sink, log_dir).run()
    sys.stderr.flush()
    os._exit(status)


if __name__ == "__main__":
    main()
