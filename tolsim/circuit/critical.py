"""The transconductance at which a mode is just sustained, followed from unit to unit.

At a factor f on every transconductance the mode neither grows nor decays, at frequency w:

    A x = 0,   A(w, f) = j w C + J + (f - 1) J_m,     c* x = 1

Newton on (x, w, f): with y_w = A^-1 j C x and y_f = A^-1 J_m x the next vector is
-(y_w dw + y_f df), and its normalisation gives dw and df as two real equations (inverse iteration
for a two-parameter eigenvalue problem; Unger, "Nichtlineare Behandlung von Eigenwertaufgaben",
Z. angew. Math. Mech. 30 (1950) 281-282, has the one-parameter form).  Started from the nominal
unit's critical point it takes a few small solves where a search by eigenvalues takes a dozen.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.devices import Floats

ROUNDS = 8
TOLERANCE = 1e-5  # relative change of w and f
LONGEST_LOG = 0.7  # change of ln f per round


@dataclass(frozen=True)
class Critical:
    """Critical points of N units."""

    omega: Floats  # (N,) rad/s
    factor: Floats  # (N,) on every transconductance
    vector: NDArray[np.complex128]  # (N, n)
    settled: NDArray[np.bool_]  # (N,)


def critical_of(C: Floats, J: Floats, through: Floats, factor: float, omega: float) -> Critical:
    """The critical point of one unit (1, n, n) whose factor is known, `omega` being near it."""
    matrix = np.linalg.solve(J[0] + (factor - 1.0) * through[0] + omega * C[0], C[0])
    mu, vectors = np.linalg.eig(matrix)
    # lambda = omega - 1/mu; the sustained mode has the smallest real part beside its frequency
    finite = np.abs(mu) > 1e-12 / omega
    values = np.where(finite, omega - 1.0 / np.where(finite, mu, 1.0), np.inf)
    oscillates = finite & (values.imag > 0.3 * omega) & (values.imag < 3.0 * omega)
    pick = int(np.argmin(np.where(oscillates, np.abs(values.real), np.inf)))
    return Critical(
        values[pick : pick + 1].imag,
        np.array([factor]),
        vectors[:, pick][None].astype(complex),
        np.array([bool(oscillates[pick])]),
    )


def follow_critical(C: Floats, J: Floats, through: Floats, start: Critical) -> Critical:
    """Critical points of N units (N, n, n) near that of another unit."""
    units = len(C)
    anchor = start.vector[0].conj() / np.vdot(start.vector[0], start.vector[0]).real
    x = np.repeat(start.vector, units, axis=0)
    omega, factor = np.repeat(start.omega, units), np.repeat(start.factor, units)
    settled = np.zeros(units, dtype=bool)
    for _ in range(ROUNDS):
        A = J + (factor - 1.0)[:, None, None] * through + 1j * omega[:, None, None] * C
        sides = np.stack([1j * (C @ x[:, :, None])[:, :, 0], (through @ x[:, :, None])[:, :, 0]], 2)
        try:
            y = np.linalg.solve(A, sides)
        except np.linalg.LinAlgError:  # hit exactly: the others are searched for by eigenvalues
            break
        a, b = (y.transpose(0, 2, 1) @ anchor).T
        determinant = a.real * b.imag - a.imag * b.real
        with np.errstate(all="ignore"):
            turn = -b.imag / determinant
            gain = a.imag / determinant
            x = -(y[:, :, 0] * turn[:, None] + y[:, :, 1] * gain[:, None])
            settled = (np.abs(turn) < TOLERANCE * omega) & (np.abs(gain) < TOLERANCE * factor)
            omega = omega + turn
            factor = factor * np.exp(np.clip(gain / factor, -LONGEST_LOG, LONGEST_LOG))
        sound = np.isfinite(omega) & np.isfinite(factor) & np.isfinite(x).all(axis=1)
        lost = ~sound
        omega[lost], factor[lost], x[lost] = start.omega[0], start.factor[0], start.vector[0]
        settled &= sound
        if settled.all():
            break
    return Critical(omega, factor, x, settled)
