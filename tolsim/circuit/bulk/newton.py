"""Newton-GMRES for the units that the chord iteration does not settle.

The same preconditioner M, the same residual in double precision: with F(z) = M R(z) the Newton
step solves F'(z) d = -F(z) by GMRES (Saad, Schultz, SIAM J. Sci. Stat. Comput. 7 (1986) 856-869),
products F' v measured by differences.  Steps are shortened until |F| falls, a test that no scaling
of the equations changes (Deuflhard, "Newton Methods for Nonlinear Problems", Springer 2004, 3.2).
All slots work side by side; each unit's numbers are its own, whatever the others need.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.bulk.chord import TOLERANCE, Iterated
from tolsim.circuit.bulk.inverse import Corrector, Inverse
from tolsim.circuit.bulk.residual import Residual
from tolsim.circuit.devices import Floats

ROUNDS = 15  # Newton steps
INNER = 16  # directions of each GMRES
PROBE = 1e-6  # scaled length of a measured product
LONGEST_MOVE = 0.5  # scaled
SHARES = (1.0, 0.5, 0.25, 0.1, 0.03)  # of the step, tried in turn
FALL = 0.2  # |F| must fall by this part of the step's share


def settle_stubborn(residual: Residual, inverse: Inverse, start: Floats) -> Iterated:
    """Newton on every unit of the residual's table, a slotful at a time.

    Parameters
    ----------
    inverse : Inverse
        M.
    start : (unknowns, N)
    """
    slots, units = residual.units, start.shape[1]
    found = Iterated(
        start.copy(), np.full(units, np.inf), np.zeros(units, np.intp), np.zeros(units, bool)
    )
    corrector = inverse.corrector(slots)
    for first in range(0, units, slots):
        here = np.minimum(np.arange(first, first + slots), units - 1)
        residual.load(np.arange(slots), here)
        z, update, spent = _newton(residual, corrector, start[:, here])
        kept = min(slots, units - first)
        block = slice(first, first + kept)
        found.z[:, block], found.update[block] = z[:, :kept], update[:kept]
        found.iterations[block] = spent[:kept]
        found.settled[block] = update[:kept] < TOLERANCE
    return found


def _newton(
    residual: Residual, corrector: Corrector, z: Floats
) -> tuple[Floats, Floats, NDArray[np.intp]]:
    """End, last scaled update and residuals evaluated, for the units in the slots."""
    slots = z.shape[1]
    update, spent = np.full(slots, np.inf), np.zeros(slots, dtype=np.intp)
    with np.errstate(all="ignore"):
        value = _weighed(corrector, residual.evaluate(z))
        size = np.linalg.norm(value, axis=0)
        for _ in range(ROUNDS):
            active = np.isfinite(size) & (update >= TOLERANCE)
            if not active.any():
                break
            step = _direction(residual, corrector, z, value)
            longest = np.abs(step).max(axis=0)
            step *= np.minimum(1.0, LONGEST_MOVE / np.maximum(longest, 1e-300))
            z, value, size, moved = _shortened(residual, corrector, z, value, size, step, active)
            # a step that no share of makes |F| fall ends the search
            update = np.where(active, np.where(moved > 0, longest, np.nan), update)
            size = np.where(active & (moved == 0), np.nan, size)
            spent += np.where(active, INNER + 2, 0)
    return z, np.where(np.isfinite(update), update, np.inf), spent


def _weighed(corrector: Corrector, gap: Floats) -> Floats:
    """M R: single precision does for M, it only has to be near the inverse."""
    return -corrector(gap).astype(float)


def _shortened(
    residual: Residual,
    corrector: Corrector,
    z: Floats,
    value: Floats,
    size: Floats,
    step: Floats,
    active: NDArray[np.bool_],
) -> tuple[Floats, Floats, Floats, Floats]:
    """Move every active unit by the largest share of its step that makes |F| fall."""
    z, value, size = z.copy(), value.copy(), size.copy()
    moved, begun = np.zeros(len(size)), size.copy()
    for share in SHARES:
        open_units = active & (moved == 0)
        if not open_units.any():
            break
        trial = np.where(open_units, z + share * step, z)
        new = _weighed(corrector, residual.evaluate(trial))
        length = np.linalg.norm(new, axis=0)
        # at round-off |F| cannot fall any more
        falls = (length < begun * (1 - FALL * share)) | (length < TOLERANCE)
        taken = open_units & falls
        z[:, taken], value[:, taken] = trial[:, taken], new[:, taken]
        size[taken], moved[taken] = length[taken], share
    return z, value, size, moved


def _direction(residual: Residual, corrector: Corrector, z: Floats, value: Floats) -> Floats:
    """Newton step of every slot: GMRES with `INNER` directions, none spared."""
    unknowns, slots = z.shape
    basis = np.empty((INNER + 1, unknowns, slots))
    hessenberg = np.zeros((slots, INNER + 1, INNER))
    length = np.linalg.norm(value, axis=0)
    here = residual.evaluate(z).copy()
    basis[0] = -value / np.maximum(length, 1e-300)
    for k in range(INNER):
        probe = PROBE / np.maximum(np.abs(basis[k]).max(axis=0), 1e-300)
        new = _weighed(corrector, (residual.evaluate(z + probe * basis[k]) - here) / probe)
        for j in range(k + 1):  # modified Gram-Schmidt
            hessenberg[:, j, k] = np.sum(basis[j] * new, axis=0)
            new -= hessenberg[:, j, k] * basis[j]
        hessenberg[:, k + 1, k] = np.linalg.norm(new, axis=0)
        basis[k + 1] = new / np.maximum(hessenberg[:, k + 1, k], 1e-300)
    hessenberg[~np.isfinite(hessenberg).all(axis=(1, 2))] = 0.0
    weights = np.linalg.pinv(hessenberg)[:, :, 0] * length[:, None]
    return np.einsum("jnu,uj->nu", basis[:INNER], weights)
