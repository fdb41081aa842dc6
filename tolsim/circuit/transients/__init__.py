"""Transients of N units: compiled TR-BDF2 with its own step choice, unit after unit.

Orbits are found with all units side by side in numpy; a transient is better run one unit after
the other, because every unit wants its own steps and its own end.
"""
