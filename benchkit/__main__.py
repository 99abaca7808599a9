"""``python -m benchkit`` is the command ``benchkit``."""

from benchkit.cli import main

main()
