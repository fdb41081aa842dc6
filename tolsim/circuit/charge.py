"""Charge trapped on islands: groups of nets joined to the rest by capacitors only.

The total charge of an island cannot change (but for the leak), so it owns a Floquet multiplier of
1 that has nothing to do with stability.  In the linearised circuit its left eigenvector is known:
the row 1_island (E + P C P'), which every period reproduces.
"""

from __future__ import annotations

import numpy as np
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from tolsim.circuit.devices import Floats
from tolsim.circuit.network import Network


def islands(network: Network) -> Floats:
    """Members of each of i islands, (i, n) of 0 and 1; depends on the topology only."""
    n = network.states
    held = n  # stands for every net of fixed voltage
    nets = np.array([i for name, i in network.index.items() if name not in network.branches])
    joined: list[tuple[int, int]] = []
    conductance = network.F[0][np.ix_(nets, nets)]
    for row, net in enumerate(nets):
        joined += [(net, nets[k]) for k in np.flatnonzero(conductance[row]) if k != row]
        if conductance[row].sum() > 1.5 * network.leak:
            joined.append((net, held))
    for ref in network.branches:
        ends = [net for net in nets if network.F[0][network.index[ref], net] != 0]
        # an inductor with one unknown end hangs on a fixed net; a load loop has none
        joined += [(ends[0], ends[1] if len(ends) > 1 else held)] if ends else []
    for elements in network.devices.elements:
        if elements.kind != "current":
            continue
        for port in np.flatnonzero(np.any(elements.inject != 0, axis=1)):
            ends = list(np.flatnonzero(network.D[port]))
            joined += [(ends[0], ends[1] if len(ends) > 1 else held)] if ends else []
    rows, columns = np.array(joined).T if joined else np.zeros((2, 0), dtype=int)
    graph = coo_array((np.ones(len(rows)), (rows, columns)), shape=(n + 1, n + 1))
    _, label = connected_components(graph, directed=False)
    loose = dict.fromkeys(int(label[net]) for net in nets if label[net] != label[held])
    members = np.zeros((len(loose), n))
    for island, name in enumerate(loose):
        members[island, nets[label[nets] == name]] = 1.0
    return members


def charge_rows(network: Network, members: Floats, x: Floats) -> Floats:
    """How the charge of each island answers to the states at x (N, n): (N, i, n), C/V."""
    _, _, _, c = network.devices.evaluate(network.port_voltages(x))
    capacitance = network.E + network.D.T @ c @ network.D
    return members @ capacitance
