"""The nominal orbit at the order of the bulk solver, and the inverse Jacobian for all units.

Newton in double precision; the dense Jacobian is measured column by column, as many columns at a
time as there are slots, which keeps one single set of equations (`residual`).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.bulk.grid import Grid, analyse
from tolsim.circuit.bulk.residual import HEAT_SCALE, Anchor, Residual
from tolsim.circuit.bulk.unit_table import Topology, UnitTable
from tolsim.circuit.devices import Floats
from tolsim.circuit.orbit import Solution
from tolsim.circuit.thermal import Case

SLOTS = 64
PROBE = 1e-6  # step of the measured derivatives, in scaled unknowns
NEWTON_ROUNDS = 12
TOLERANCE = 1e-8  # scaled update of the nominal orbit
NEAR = 1e-3  # scaled update below which the last Jacobian still serves
LONGEST_MOVE = 0.5


class NoReferenceError(ArithmeticError):
    """The nominal orbit does not settle at this order: the bulk solver cannot serve this case."""


@dataclass(frozen=True)
class Reference:
    """Nominal orbit and the matrix that turns a residual into an update."""

    anchor: Anchor
    z: Floats  # (unknowns,)
    inverse: NDArray[np.float32]  # (unknowns, unknowns)


def first_unknowns(solution: Solution, topology: Topology, grid: Grid) -> Floats:
    """Unknowns (unknowns, N) of orbits found by another solver."""
    waves = solution.samples[:-1].transpose(0, 2, 1) / topology.scale[:, None]
    z = [analyse(waves, grid.harmonics).transpose(1, 0, 2).reshape(-1, solution.units)]
    if not topology.driven:
        z.append(np.zeros((1, solution.units)))
    z += [solution.junctions[ref][None] / HEAT_SCALE for ref in topology.heated]
    return np.concatenate(z)


def anchor_of(z: Floats, omega: float, topology: Topology, grid: Grid) -> Anchor:
    """Phase condition <D X_ref, X> = 0 that keeps the phase of an orbit z (unknowns,).

    <D X_ref, X_ref> vanishes by itself (D is skew), so the reference fulfils its own condition.
    """
    n, K = topology.states, grid.size
    slope = grid.derive(z[: n * K].reshape(n, K, 1)).reshape(-1)
    return Anchor(omega, slope / np.sum(slope**2))


def settle_reference(case: Case, solution: Solution, topology: Topology, grid: Grid) -> Reference:
    """Newton on the nominal unit from its orbit by shooting.

    Raises
    ------
    NoReferenceError
        If it does not settle, or slips to an orbit of another size or frequency.
    """
    start = first_unknowns(solution, topology, grid)[:, 0]
    anchor = anchor_of(start, 2 * np.pi / float(solution.period[0]), topology, grid)
    table = UnitTable.of(case, topology, np.float64)
    residual = Residual(case.design, table, topology, grid, anchor, SLOTS)
    residual.load(np.arange(SLOTS), np.zeros(SLOTS, dtype=np.intp))
    z = start.copy()
    inverse, last = np.empty((0, 0)), np.inf
    for _ in range(NEWTON_ROUNDS):
        gap = _residual_at(residual, z)
        if not inverse.size or last > NEAR:
            inverse = _inverse(residual, z)
        move = -inverse @ gap
        last = float(np.abs(move).max())
        z = z + move * min(1.0, LONGEST_MOVE / max(last, 1e-300))
        if last < TOLERANCE:
            break
    if not last < 1e3 * TOLERANCE:
        raise NoReferenceError(f"last update {last:.1e} at {grid.harmonics} harmonics")
    if np.abs(z - start).max() > LONGEST_MOVE:
        raise NoReferenceError("slipped to another orbit than shooting found")
    # taken within `NEAR` of the orbit: spread units are much further away than that
    return Reference(anchor, z, inverse.astype(np.float32))


def _residual_at(residual: Residual, z: Floats) -> Floats:
    copies = np.repeat(z[:, None], residual.units, axis=1)
    return residual.evaluate(copies)[:, 0].copy()


def _inverse(residual: Residual, z: Floats) -> Floats:
    """Inverse of the Jacobian at z."""
    matrix = jacobian(residual, z)
    if not np.isfinite(matrix).all():
        raise NoReferenceError("the Jacobian has entries that are no numbers")
    try:
        return np.linalg.inv(matrix).astype(np.float64)
    except np.linalg.LinAlgError as problem:
        raise NoReferenceError("the Jacobian is singular") from problem


def jacobian(residual: Residual, z: Floats) -> Floats:
    """dR/dz (unknowns, unknowns) of the unit in all slots, by forward differences."""
    size, slots = len(z), residual.units
    base = _residual_at(residual, z)
    matrix = np.empty((size, size))
    for first in range(0, size, slots):
        columns = np.arange(first, min(first + slots, size))
        probes = np.repeat(z[:, None], slots, axis=1)
        probes[columns, columns - first] += PROBE
        change = residual.evaluate(probes)[:, : len(columns)] - base[:, None]
        matrix[:, columns] = change / PROBE
    return matrix
