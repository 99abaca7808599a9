"""The amplifier stage: its design file, what a healthy unit should read, and what can be wrong with it.

Modules
-------
design, design_values, design_checks
    The design file, format 1: read, checked, frozen.
points
    Test points and parts, by their dotted names.
faults
    The fault table: part x fault, prior, reason, and how a fault is put into values.
topologies
    From a design to a netlist.
draws
    The nominal unit, drawn units, seeds.
conditions
    What a reading is taken under.
runs, operate
    Operating points of units under a powered condition: trimmer, heat, faults, meter.
unpowered
    A meter's ohms and diode ranges across the circuit.
heat
    Junction temperatures in balance.
quantiles, expected
    Limits that hold 99.73 % of healthy units.
trimmer, trimmer_slope, trimmer_report
    What the trimmer can do: authority, an open wiper, cold to warm; slope; all of it together.
crossover, bias_cost
    Gain and output resistance against output current, the best bias; what a bias error costs.
more_expected
    Heat, trimmer and bias of a condition as plain data.
reach
    Lowest rails; what a check says about a design.
"""
