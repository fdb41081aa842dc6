"""The nominal orbit at the order of the bulk solver, and the inverse Jacobian for all units.

Newton in double precision from the orbit that shooting found.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from tolsim.circuit.bulk.grid import Grid, analyse
from tolsim.circuit.bulk.inverse import Inverse, SingularError, inverse_at
from tolsim.circuit.bulk.residual import HEAT_SCALE, Anchor, Residual
from tolsim.circuit.bulk.unit_table import Topology, UnitTable
from tolsim.circuit.devices import Floats
from tolsim.circuit.orbit import Solution
from tolsim.circuit.thermal import Case

SLOTS = 64
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
    inverse: Inverse  # in single precision


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
    inverse, last = None, np.inf
    for _ in range(NEWTON_ROUNDS):
        if inverse is None or last > NEAR:
            inverse = _inverse(case, residual, z)
            corrector = inverse.corrector(1)
        move = corrector(_residual_at(residual, z)[:, None])[:, 0].copy()
        last = float(np.abs(move).max())
        z = z + move * min(1.0, LONGEST_MOVE / max(last, 1e-300))
        if last < TOLERANCE:
            break
    if not last < 1e3 * TOLERANCE:
        raise NoReferenceError(f"last update {last:.1e} at {grid.harmonics} harmonics")
    if np.abs(z - start).max() > LONGEST_MOVE:
        raise NoReferenceError("slipped to another orbit than shooting found")
    assert inverse is not None
    # taken within `NEAR` of the orbit: spread units are much further away than that
    return Reference(anchor, z, inverse.single())


def _inverse(case: Case, residual: Residual, z: Floats) -> Inverse:
    try:
        return inverse_at(case, residual, z)
    except SingularError as problem:
        raise NoReferenceError(str(problem)) from problem


def _residual_at(residual: Residual, z: Floats) -> Floats:
    copies = np.repeat(z[:, None], residual.units, axis=1)
    return residual.evaluate(copies)[:, 0].copy()
