"""Where to start: first order exactly, higher orders learnt from the pilot units.

The orbit moves with a part value as dz/dp = -J^-1 dR/dp at the nominal unit.  What is left of the
pilots' orbits beyond that, e(x), x the deviations of the part values, is fitted by kernel ridge
regression with a polynomial kernel (Schoelkopf, Smola, "Learning with Kernels", MIT Press 2002,
ch. 4 and 9)

    e(x) = sum_i a_i k(x_i, x),     k = t/10 + t^2 + 3 t^3/10 + t^4/10,   t = x_i' S x,

the diagonal S weighing each value by how far it moves the orbit.  Second order costs no list of
products that way, and any number of part values will do.  The fit is kept in few directions of z.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.bulk.grid import Grid
from tolsim.circuit.bulk.reference import Reference
from tolsim.circuit.bulk.residual import Residual
from tolsim.circuit.bulk.unit_table import Topology, UnitTable
from tolsim.circuit.continuation import distance
from tolsim.circuit.devices import Floats
from tolsim.circuit.thermal import Case

STEP_RELATIVE = 1e-3  # perturbation of a part value
STEP_KELVIN = 0.5  # of the ambient temperature
AMBIENT = "ambient"
KERNEL = (0.1, 1.0, 0.3, 0.1)  # weights of t, t^2, t^3, t^4
RIDGE = 1e-5  # of the mean diagonal
DIRECTIONS = 48  # of z that the fit keeps
FEWEST_PILOTS = 16
WIDTH = 64  # units predicted together, always this many: a unit's bits must not depend on it


@dataclass(frozen=True)
class Predictor:
    """First order, and what the pilots taught."""

    origin: Floats  # (unknowns,)
    values: Mapping[str, Floats]  # nominal part values, (1,) each
    slopes: Mapping[str, Floats]  # key -> (unknowns,) per unit of `distance`
    weights: Floats  # (k,) square root of S
    places: Floats  # (k, P) weighted deviations of the pilots
    directions: NDArray[np.float32]  # (unknowns, d)
    amounts: NDArray[np.float32]  # (d, P)
    furthest: float  # largest correction seen among the pilots

    def start(self, case: Case) -> Floats:
        """Predicted unknowns (unknowns, N) of every unit of a case."""
        z = np.empty((len(self.origin), case.units))
        slopes = np.stack(list(self.slopes.values()), axis=1)
        for first in range(0, case.units, WIDTH):
            block = np.minimum(np.arange(first, first + WIDTH), case.units - 1)
            x = self.deviations(case.take(block))
            predicted = self.origin[:, None] + slopes @ x
            if self.places.size:
                predicted += self._learnt(x)
            wanted = min(WIDTH, case.units - first)
            z[:, first : first + wanted] = predicted[:, :wanted]
        return z

    def deviations(self, case: Case) -> Floats:
        """x (k, N)."""
        return np.stack([distance(key, case.values[key], self.values[key]) for key in self.slopes])

    def _learnt(self, x: Floats) -> Floats:
        likeness = kernel(self.places.T @ (self.weights[:, None] * x)).astype(np.float32)
        correction = self.directions @ (self.amounts @ likeness)
        size = np.maximum(correction.max(axis=0), -correction.min(axis=0))
        # a polynomial far outside the pilots' cloud promises too much
        return correction * np.minimum(1.0, self.furthest / np.maximum(size, 1e-30))


def kernel(t: Floats) -> Floats:
    """Polynomial kernel of the likeness t, elementwise."""
    a, b, c, d = KERNEL
    return t * (a + t * (b + t * (c + t * d)))


def first_order(
    case: Case, reference: Reference, topology: Topology, grid: Grid, keys: tuple[str, ...]
) -> Predictor:
    """Exact sensitivities of the nominal orbit to every part value of `keys`."""
    moves = len(keys)
    copies = np.zeros(2 * moves, dtype=np.intp)
    values = {key: value[copies].copy() for key, value in case.values.items()}
    reach = np.zeros(moves)
    for row, key in enumerate(keys):
        base = float(case.values[key][0])
        small = STEP_KELVIN if key == AMBIENT else STEP_RELATIVE * abs(base)
        values[key][[row, moves + row]] += np.array([small, -small])
        up, down = distance(key, values[key][[row, moves + row]], case.values[key])
        reach[row] = up - down
    table = UnitTable.of(Case(case.design, values, case.heated), topology, np.float64)
    residual = Residual(case.design, table, topology, grid, reference.anchor, 2 * moves)
    residual.load(np.arange(2 * moves), np.arange(2 * moves))
    gap = residual.evaluate(np.repeat(reference.z[:, None], 2 * moves, axis=1))
    corrector = reference.inverse.corrector(moves)
    slopes = corrector((gap[:, :moves] - gap[:, moves:]) / reach).astype(float)
    return Predictor(
        origin=reference.z,
        values=case.values,
        slopes=dict(zip(keys, slopes.T, strict=True)),
        weights=np.zeros(moves),
        places=np.zeros((moves, 0)),
        directions=np.zeros((len(reference.z), 0), np.float32),
        amounts=np.zeros((0, 0), np.float32),
        furthest=0.0,
    )


def learn(predictor: Predictor, pilots: Case, z: Floats) -> Predictor:
    """The same predictor with what solved pilots (unknowns, P) tell beyond first order."""
    if pilots.units < FEWEST_PILOTS:
        return predictor
    x = predictor.deviations(pilots)
    slopes = np.stack(list(predictor.slopes.values()), axis=1)
    left = z - predictor.origin[:, None] - slopes @ x
    weights = _weights(x, slopes)
    places = weights[:, None] * x
    likeness = kernel(places.T @ places)
    ridge = RIDGE * np.trace(likeness) / len(likeness) * np.eye(len(likeness))
    # eigenvectors of the small Gram matrix are the main directions of z
    strength, mixing = np.linalg.eigh(left.T @ left)
    kept = strength[::-1][:DIRECTIONS] > 1e-12 * strength[-1]
    mixing, strength = mixing[:, ::-1][:, :DIRECTIONS][:, kept], strength[::-1][:DIRECTIONS][kept]
    directions = (left @ mixing) / np.sqrt(strength)
    amounts = np.linalg.solve(likeness + ridge, left.T @ directions).T
    return replace(
        predictor,
        weights=weights,
        places=places,
        directions=directions.astype(np.float32),
        amounts=amounts.astype(np.float32),
        furthest=float(np.abs(left).max()),
    )


def _weights(x: Floats, slopes: Floats) -> Floats:
    """Square root of each value's reach, per deviation, such that the mean of |S x|^2 is one."""
    spread = x.std(axis=1)
    reach = np.sqrt(np.linalg.norm(slopes, axis=0) * spread)
    weights = np.where(spread > 0, reach / np.where(spread > 0, spread, 1.0), 0.0)
    size = np.mean(np.sum((weights[:, None] * x) ** 2, axis=0))
    return weights / np.sqrt(max(size, 1e-300))
