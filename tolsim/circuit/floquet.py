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
    monodromy: Floats, samples: Floats, scale: Floats, *, driven: bool
) -> NDArray[np.complex128]:
    """Multipliers of N orbits, largest first; the phase one becomes 0.

    Parameters
    ----------
    monodromy : (N, n, n)
    samples : (m + 1, N, n)
        Orbit, from which the flow at the start is taken.
    scale : (n,)
        Amplitudes, so that volts and amperes are comparable.
    """
    return sorted_multipliers(monodromy, None if driven else samples[1] - samples[-2], scale)


def sorted_multipliers(
    monodromy: Floats, flow: Floats | None, scale: Floats
) -> NDArray[np.complex128]:
    """Multipliers of N orbits, largest first, with the direction `flow` (N, n) taken out."""
    scaled = monodromy * (scale / scale[:, None])
    if flow is not None:
        along = flow / scale
        along /= np.linalg.norm(along, axis=1, keepdims=True)
        project = np.eye(len(scale)) - along[:, :, None] * along[:, None, :]
        scaled = project @ scaled @ project
    values = np.linalg.eigvals(scaled).astype(complex)
    order = np.argsort(-np.abs(values), axis=1)
    return np.take_along_axis(values, order, axis=1)


def largest_beside_charge(multipliers: NDArray[np.complex128]) -> Floats:
    """Largest modulus that is not a trapped-charge mode (those sit within `CHARGE_BAND` of +1)."""
    trapped = np.abs(multipliers - 1.0) < CHARGE_BAND
    return np.where(trapped, 0.0, np.abs(multipliers)).max(axis=1)
