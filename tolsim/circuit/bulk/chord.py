"""Chord iteration with Anderson mixing over a pool of slots: one inverse Jacobian serves all units.

With g = -M R(z), M the nominal unit's inverse Jacobian, a plain chord step is z + g.  Anderson
mixing of depth 3 subtracts what the last steps tell about the next one (D. G. Anderson, "Iterative
procedures for nonlinear integral equations", J. ACM 12 (1965) 547-560; Walker, Ni, SIAM J. Numer.
Anal. 49 (2011) 1715-1735):

    gamma = argmin |g - dG gamma|,     z <- z + g - (dZ + dG) gamma

A slot whose unit has settled, or used up its iterations, takes the next unit at once.  All arrays
keep their shape and a unit's numbers never depend on its slot or its neighbours (history is ordered
by the unit's own age), so its answer has the same bits in any company.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.bulk.inverse import Inverse
from tolsim.circuit.bulk.residual import Residual
from tolsim.circuit.devices import Floats, Ints

DEPTH = 3
SKETCH = 4  # every fourth unknown is enough to tell steps apart (an odd K: all harmonics in turn)
TOLERANCE = 3e-5  # scaled error, estimated from the last two updates
FASTEST, SLOWEST = 0.3, 0.95  # contractions that are believed
ITERATIONS = 30
LONGEST_MOVE = 0.3  # scaled
TINY = np.float32(1e-30)
RIDGE = 1e-10  # of the mean square of the history, keeps young units solvable

Singles = NDArray[np.float32]


@dataclass(frozen=True)
class Iterated:
    """Ends of the iteration for N units."""

    z: Floats  # (unknowns, N)
    update: Floats  # (N,) last scaled update; the answer is better than it by one step
    iterations: Ints  # (N,)
    settled: NDArray[np.bool_]  # (N,)


class _History:
    """The last steps of every slot, newest first."""

    def __init__(self, unknowns: int, slots: int) -> None:
        self.turn = 0
        self.change = np.zeros((DEPTH, unknowns, slots), np.float32)  # dG
        self.step = np.zeros((DEPTH, unknowns, slots), np.float32)  # dZ + dG
        self.gram = np.zeros((DEPTH, DEPTH, slots))  # dG . dG, by place in the ring
        self.last_g = np.zeros((unknowns, slots), np.float32)
        self.last_move = np.zeros((unknowns, slots), np.float32)
        self._product = np.empty((unknowns, slots), np.float32)
        self._move = np.empty((unknowns, slots), np.float32)

    def _dot(self, a: Singles, b: Singles) -> Floats:
        return np.multiply(a[::SKETCH], b[::SKETCH]).sum(axis=0).astype(float)

    def remember(self, g: Singles) -> None:
        """Append the step that led to g."""
        self.turn = (self.turn + 1) % DEPTH
        here = self.turn
        np.subtract(g, self.last_g, out=self.change[here])
        np.add(self.last_move, self.change[here], out=self.step[here])
        for other in range(DEPTH):
            product = self._dot(self.change[here], self.change[other])
            self.gram[here, other] = self.gram[other, here] = product

    def mix(self, g: Singles, age: Ints) -> Singles:
        """Move of every slot: g - (dZ + dG) gamma, newest step first.

        A unit of age a has made a steps; what is older belongs to the slot's last occupant.
        """
        order = [(self.turn - back) % DEPTH for back in range(DEPTH)]
        own = age[:, None] > np.arange(DEPTH)
        gram = self.gram[np.ix_(order, order)].transpose(2, 0, 1)
        gram = np.where(own[:, :, None] & own[:, None, :], gram, 0.0)
        size = np.einsum("uii->u", gram)
        diagonal = np.arange(DEPTH)
        gram[:, diagonal, diagonal] += np.where(own, RIDGE * size[:, None] + 1e-60, 1.0)
        aim = np.stack([self._dot(self.change[place], g) for place in order], axis=1)
        aim = np.where(own, aim, 0.0)
        gamma = np.linalg.solve(gram, aim[:, :, None])[:, :, 0].astype(np.float32)
        move = self._move
        move[:] = g
        for back, place in enumerate(order):
            np.multiply(self.step[place], gamma[:, back], out=self._product)
            move -= self._product
        return move

    def clear(self, slots: Ints) -> None:
        """Wipe numbers that are none."""
        for past in (self.change, self.step, self.gram):
            past[:, :, slots] = 0
        self.last_g[:, slots] = 0
        self.last_move[:, slots] = 0


class _Pool:
    """Slots with the units that sit in them."""

    def __init__(self, residual: Residual, start: Floats) -> None:
        slots, units = residual.units, start.shape[1]
        self.residual, self.start = residual, start
        self.found = Iterated(
            start.copy(), np.full(units, np.inf), np.zeros(units, np.intp), np.zeros(units, bool)
        )
        self.occupant = np.full(slots, -1, dtype=np.intp)  # -1: idle, repeats what it did last
        self.age = np.zeros(slots, dtype=np.intp)
        self.size = np.zeros(slots)  # last scaled update
        self.z = np.repeat(start[:, :1], slots, axis=1)
        self.coming = 0
        residual.load(np.arange(slots), np.zeros(slots, np.intp))

    def refill(self) -> bool:
        """Let the next units in; whether anybody is in."""
        free = np.flatnonzero(self.occupant < 0)
        filled = free[: self.start.shape[1] - self.coming]
        if filled.size:
            entering = np.arange(self.coming, self.coming + len(filled))
            self.coming += len(filled)
            self.residual.load(filled, entering)
            self.z[:, filled] = self.start[:, entering]
            self.occupant[filled], self.age[filled], self.size[filled] = entering, 0, 0.0
        return bool(np.any(self.occupant >= 0))

    def move(self, move: Singles, size: Floats, iterations: int, tolerance: float) -> None:
        """Move every slot; units that are through leave with the state after the move."""
        self.z += move
        self.age += 1
        settled = _settled(size, self.size, tolerance)
        self.size = size
        over = settled | ~np.isfinite(size) | (self.age >= iterations)
        leaving = np.flatnonzero(over & (self.occupant >= 0))
        who, found = self.occupant[leaving], self.found
        found.z[:, who] = self.z[:, leaving]
        found.update[who], found.iterations[who] = size[leaving], self.age[leaving]
        found.settled[who] = settled[leaving]
        self.occupant[leaving] = -1


def iterate(
    residual: Residual,
    inverse: Inverse,
    start: Floats,
    iterations: int = ITERATIONS,
    tolerance: float = TOLERANCE,
) -> Iterated:
    """Settle every unit of the residual's table.

    Parameters
    ----------
    inverse : Inverse
        M, the inverse Jacobian of the nominal unit, in single precision.
    start : (unknowns, N)
        Predicted unknowns.
    """
    pool = _Pool(residual, start)
    shape = pool.z.shape
    history = _History(*shape)
    corrector = inverse.corrector(residual.units)
    while pool.refill():
        with np.errstate(all="ignore"):  # units that run away leave as not settled
            g = corrector(residual.evaluate(pool.z))
            size = _largest(g)
            history.remember(g)
            move = history.mix(g, pool.age)
            move *= np.minimum(1, LONGEST_MOVE / np.maximum(_largest(move), TINY))
        history.last_g[:], history.last_move[:] = g, move
        pool.move(move, size.astype(float), iterations, tolerance)
        broken = np.flatnonzero(~np.isfinite(size))
        if broken.size:
            pool.z[:, broken] = start[:, :1]
            history.clear(broken)
    return pool.found


def _largest(columns: Singles) -> Singles:
    """Largest magnitude in each column."""
    return np.maximum(columns.max(axis=0), -columns.min(axis=0))


def _settled(size: Floats, last_size: Floats, tolerance: float) -> NDArray[np.bool_]:
    """Whether the error after this update is below the tolerance.

    Updates that shrink by a ratio r leave an error of r/(1 - r) times the last one.
    """
    ratio = np.clip(size / np.maximum(last_size, 1e-300), FASTEST, SLOWEST)
    return size * ratio / (1 - ratio) < tolerance
