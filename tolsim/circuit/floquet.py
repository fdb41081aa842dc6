"""Floquet multipliers of an orbit: they tell whether small disturbances die out.

An autonomous orbit has one multiplier of exactly 1 (a shift in time).  On a finite grid it comes
out beside 1, so it is taken out beforehand: with v the flow at the start, the multipliers are the
eigenvalues of Q M Q, Q = I - v v'/v'v.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.devices import Floats

CHARGE_BAND = 1e-4  # |multiplier - 1| of a charge trapped between capacitors, drained by the leak


def deflated_multipliers(
    monodromy: Floats, samples: Floats, scale: Floats, charges: Floats, *, driven: bool
) -> NDArray[np.complex128]:
    """Multipliers of N orbits, largest first; those of phase and trapped charge become 0.

    Parameters
    ----------
    monodromy : (N, n, n)
    samples : (m + 1, N, n)
        Orbit, from which the flow at the start is taken.
    scale : (n,)
        Amplitudes, so that volts and amperes are comparable.
    charges : (N, i, n)
        Rows of trapped charge, see `charge`.
    """
    # the sum of the first and last step leaves out the gap by which the orbit does not close
    flow = None if driven else samples[1] - samples[0] + samples[-1] - samples[-2]
    return sorted_multipliers(monodromy, flow, scale, charges)


def sorted_multipliers(
    monodromy: Floats, flow: Floats | None, scale: Floats, charges: Floats | None = None
) -> NDArray[np.complex128]:
    """Multipliers of N orbits, largest first.

    The direction `flow` (N, n) is taken out, and what is left is looked at only among changes
    that leave the island charges (N, i, n) alone: phase and trapped charge both have multiplier 1,
    and on a finite grid two that nearly coincide part by the root of the error, to either side.
    """
    units, n = monodromy.shape[:2]
    scaled = monodromy * (scale / scale[:, None])
    basis = np.broadcast_to(np.eye(n), (units, n, n))
    if charges is not None and charges.shape[1]:
        rows = np.swapaxes(charges * scale, 1, 2)
        basis = np.linalg.qr(rows, mode="complete").Q[:, :, charges.shape[1] :]
        scaled = np.swapaxes(basis, 1, 2) @ scaled @ basis
    if flow is not None:
        along = np.einsum("uij,ui->uj", basis, flow / scale)
        along /= np.linalg.norm(along, axis=1, keepdims=True)
        project = np.eye(along.shape[1]) - along[:, :, None] * along[:, None, :]
        scaled = project @ scaled @ project
    values = np.zeros((units, n), dtype=complex)
    values[:, : scaled.shape[1]] = np.linalg.eigvals(scaled)
    order = np.argsort(-np.abs(values), axis=1)
    return np.take_along_axis(values, order, axis=1)


def largest_beside_charge(multipliers: NDArray[np.complex128]) -> Floats:
    """Largest modulus that is not a trapped-charge mode (those sit within `CHARGE_BAND` of +1)."""
    trapped = np.abs(multipliers - 1.0) < CHARGE_BAND
    return np.where(trapped, 0.0, np.abs(multipliers)).max(axis=1)
