"""Orbits of thousands of units a second: harmonic collocation with one shared inverse Jacobian.

`prepare_fast` makes a picklable plan from the nominal orbit and the pilot units, once per case;
`solve_units_fast` solves any units of that case with it; `choose` decides whether that serves.
Read `residual` (the equations), `chord` (the iteration), `prediction` (where it starts) and `solve`
(what becomes of the rest), in that order.
"""
