"""Keeps the garbage collector from stopping the screen while somebody watches a reading.

Python's collector goes through all objects that may lie in rings, those of every imported module too; once model and
toolkit are loaded, such a round stops every thread for a tenth of a second and more.  What is there when a walk begins
stays until its end, so it is taken out of those rounds, and so is what has come in by the time that a reading is to be
watched.  What is lost in rings of that kind is found at the beginning of the next walk.
"""

from __future__ import annotations

import gc


def begin() -> None:
    """Clear away what is left from before and leave the rest out of later rounds; nothing is on yet."""
    gc.unfreeze()
    gc.collect()
    gc.freeze()


def hold() -> None:
    """Leave all that is there out of later rounds; takes no time."""
    gc.freeze()


def end() -> None:
    """Let the collector see everything again."""
    gc.unfreeze()
