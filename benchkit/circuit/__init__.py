"""Circuits of resistors, transistors, supplies and sources, solved at d.c. for thousands of units at once.

This room knows what a circuit is and nothing about amplifiers.

Modules
-------
netlist
    Names what is connected to what.
devices
    Junctions, the Gummel-Poon transistor at d.c., how both change with temperature, saturating laws.
elimination
    Sparse elimination with one pivot order for all units.
plan
    The structure of the equations: which current goes where.
equations
    Currents and derivatives of a batch of units.
newton
    Newton's method for a batch of units, and what is tried on the units that it fails on.
solve
    ``compile_netlist``, and solving what it made.
solution
    What a solve found.
"""
