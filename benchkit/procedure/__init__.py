"""Procedure files and the walk: a pure state machine, events in, actions out.

`file` reads a procedure, `plan` turns it into a flat tuple of items for one design, `actions` names what a walk can
ask for, `state` is where a walk stands, and `walk` is the table of transitions.
"""
