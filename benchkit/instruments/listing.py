"""A small program of its own: ask a VISA library for the addresses that it knows, and print them as one JSON line.

``python -m benchkit.instruments.listing LIBRARY every|network``.  It runs in another process than benchkit's because
a library may hang, print, warn or crash; the one who started it stops it when it takes too long.  What the library
prints goes nowhere, its warnings become remarks.
"""

from __future__ import annotations

import json
import os
import sys
import warnings
from typing import Any


def addresses(library: str, where: str) -> dict[str, list[str]]:
    """Return the addresses under ``found`` and what went wrong under ``remarks``; never raises."""
    found: list[str] = []
    remarks: list[str] = []
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always")
        try:
            import pyvisa

            manager: Any = pyvisa.ResourceManager(library)
            # pyvisa-py asks the network whatever is asked for; of its answers only those are of interest here.
            wanted = "?*" if where == "every" else "TCPIP?*"
            found = [str(one) for one in manager.list_resources(wanted)]
        except Exception as error:
            remarks.append(f"{type(error).__name__}: {' '.join(str(error).split())[:300]}")
    remarks += [" ".join(str(one.message).split()) for one in caught if not issubclass(one.category, ResourceWarning)]
    return {"found": found, "remarks": sorted(set(remarks))}


def main() -> None:
    """Print the answer where nothing else is printed."""
    answer_to = os.dup(1)
    quiet = os.open(os.devnull, os.O_WRONLY)
    os.dup2(quiet, 1)
    os.dup2(quiet, 2)
    answer = addresses(sys.argv[1], sys.argv[2])
    with os.fdopen(answer_to, "w", encoding="utf-8") as out:
        out.write("\n" + json.dumps(answer) + "\n")
    # A library's own threads or its end must not keep this program.
    os._exit(0)


if __name__ == "__main__":
    main()
