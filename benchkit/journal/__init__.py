"""The file of events: append, flush, chain, read, recover.  It never knows what an event means."""

from benchkit.journal.line import FIRST_PREV, Line, make_line, parse_line
from benchkit.journal.reader import Journal, Verification, read, verify
from benchkit.journal.writer import Writer

__all__ = ["FIRST_PREV", "Journal", "Line", "Verification", "Writer", "make_line", "parse_line", "read", "verify"]
