"""The process that owns the instruments, writes the journal, and switches off when nobody is minding them.

Import `benchkit.keeper.client` for the screen's side of it.
"""
