"""Independent references: answers the tests compare tolsim with, made without tolsim.

Nothing in this package imports tolsim.  Circuits are written as plain ordinary
differential equations and handed to scipy's general integrators; textbook cases are
closed forms with author, year and table beside them.
"""
