"""Charge that is left when a unit is switched on again: what it ran with, after some off time.

At switch-off the nets stand at their mean voltages and the oscillation stops at once.  From there
the circuit discharges with its supplies at 0 V, through its resistors and leaks; transistors,
diodes and clamps are taken as they are at 0 V.  The equations (E + P C P') dx/dt + (F + P G P') x =
0 are stepped by the backward Euler rule, whose steps grow with time; it takes algebraic nets too.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from tolsim.circuit.bias import bias_point
from tolsim.circuit.devices import Floats
from tolsim.circuit.network import Network
from tolsim.circuit.startup import small_signal
from tolsim.circuit.thermal import Case

STEPS = 400  # each 3 % of the time: what has fallen to a twentieth is 7 % too high then
FIRST = 1e-5  # of the off time: the first step


def states_of(case: Case, network: Network, mean: Mapping[str, Floats]) -> Floats:
    """Mean voltages of running units as states (N, n) of a live network; currents are 0."""
    x = np.zeros((network.units, network.states))
    rails = {rail.net: name for name, rail in case.design.rails.items()}
    for name, place in network.index.items():
        if name in network.branches:
            continue
        if name in mean:
            x[:, place] = mean[name]
        elif name in rails:
            x[:, place] = case.values[f"{rails[name]}.voltage"]
    return x


def left_over(network: Network, x0: Floats, off_time: Floats) -> Floats:
    """States (N, n) after the off time (N,), s.

    Parameters
    ----------
    network : Network
        With live rails.
    x0 : (N, n)
        States at switch-off.
    """
    dark = network.raised(0.0)
    C, J, _ = small_signal(dark, bias_point(dark, np.zeros_like(x0)))
    times = np.concatenate([[0.0], np.geomspace(FIRST, 1.0, STEPS)])
    x = x0
    for step in np.diff(times):
        h = (step * off_time)[:, None, None]
        x = np.linalg.solve(C + h * J, np.einsum("nij,nj->ni", C, x)[..., None])[..., 0]
    return np.asarray(x)
