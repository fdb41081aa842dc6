"""What carries over when part values change at once: charges and fluxes, not voltages.

E x + P q(v) is continuous.  The new states follow from one backward step of the new circuit that
is too short to move charge, but long enough to settle nets that hold none:

    (E' + c F') x' + P (q'(v') + c f'(v')) = E x + P q(v) + c b'
"""

from __future__ import annotations

import numpy as np

from tolsim.circuit.devices import Floats
from tolsim.circuit.network import Network
from tolsim.circuit.transients.compiling import hot
from tolsim.circuit.transients.elements import FlatElements, flatten
from tolsim.circuit.transients.laws import evaluate, new_point, unit_elements
from tolsim.circuit.transients.stepping import Circuit, Rung, add_product, new_place, solve_stage

SHORT = 1e-6  # of a period: the step in which the new circuit settles


def hand_over(before: Network, after: Network, x: Floats, period: Floats, phase: float) -> Floats:
    """States (N, n) just after the change; NaN for a unit whose equations did not settle.

    Parameters
    ----------
    before, after : Network
        N units of the same topology, with the old and the new part values.
    x : (N, n)
        States just before.
    period : (N,) s
    phase : float
        Of the drive, in periods; without effect where there is none.
    """
    found = np.full_like(x, np.nan)
    charge = np.einsum("uij,uj->ui", before.E, x) + held_charge(before) - held_charge(after)
    flat_before, _ = flatten(before.devices, before.units)
    flat_after, _ = flatten(after.devices, after.units)
    _settle_all(
        (flat_before, flat_after),
        (_circuit(before, 0.0), _circuit(after, phase)),
        np.ascontiguousarray(x),
        charge,
        SHORT * period,
        found,
    )
    return found


def held_charge(network: Network) -> Floats:
    """Charge (N, n) that the fixed voltages of ideal rails put on the nets; E x leaves it out."""
    if network.held is None:
        return np.zeros((network.units, network.states))
    return network.held


def _circuit(network: Network, phase: float) -> Circuit:
    return Circuit(
        np.ascontiguousarray(network.E),
        np.ascontiguousarray(network.F),
        np.ascontiguousarray(network.D),
        np.ascontiguousarray(network.v0),
        np.ascontiguousarray(network.source_at(phase)),
    )


@hot
def _settle_all(
    elements: tuple[FlatElements, FlatElements],
    circuits: tuple[Circuit, Circuit],
    x: Floats,
    charge: Floats,
    step: Floats,
    found: Floats,
) -> None:
    """Unit after unit, so that none depends on its neighbours."""
    before, after = elements
    old, new = circuits
    p, n = new.D.shape
    P = np.ascontiguousarray(new.D.T)
    for unit in range(x.shape[0]):
        own = unit_elements(before, unit)
        at = new_point(n, p, len(own.numbers))
        at.v[:] = old.v0[unit]
        add_product(old.D, x[unit], 1.0, at.v)
        evaluate(own, at)
        side = charge[unit].copy()
        add_product(P, at.q, 1.0, side)
        c = step[unit]
        for i in range(n):
            side[i] += c * new.constant[unit, i]
        inverse = np.linalg.inv(new.E[unit] + c * new.F[unit])
        H = inverse @ P
        rung = Rung(inverse @ new.E[unit], H, new.D @ H, np.zeros(n), np.zeros((n, 0)))
        place = new_place(new.D, new.v0[unit])
        place.x_lin[:] = inverse @ side
        changed = unit_elements(after, unit)
        trial = new_point(n, p, len(changed.numbers))
        if solve_stage(rung, c, changed, place, at, trial):
            found[unit] = at.x
