"""One TR-BDF2 step of one unit, compiled; the equations stand in `circuit.stepper`.

A unit keeps the matrices of a few step lengths, each half the one before it (its *rungs*), so
that changing the step costs no new inverse.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from tolsim.circuit.devices import Floats
from tolsim.circuit.stepper import GAMMA, PORT_TOLERANCE, A, B
from tolsim.circuit.transients.compiling import hot
from tolsim.circuit.transients.elements import FlatElements
from tolsim.circuit.transients.laws import Point, evaluate, solve_small
from tolsim.circuit.transients.sources import Sources, level

QUICK_ROUNDS = 8
CAREFUL_ROUNDS = 60
HALVINGS = 10
# local error of TR-BDF2: |3 gamma^2 - 4 gamma + 2| / (12 (2 - gamma)) h^3 x''' (Bank et al. 1985)
LOCAL_ERROR = abs(3 * GAMMA**2 - 4 * GAMMA + 2) / (12 * (2 - GAMMA))


class Circuit(NamedTuple):
    """Linear part of N units."""

    E: Floats  # (N, n, n)
    F: Floats  # (N, n, n)
    D: Floats  # (p, n)
    v0: Floats  # (N, p)
    constant: Floats  # (N, n) right-hand side that does not change


class Rung(NamedTuple):
    """Matrices of one step length of one unit; with a first axis, of all its step lengths."""

    G: Floats  # (n, n) S^-1 E
    H: Floats  # (n, p) S^-1 P
    K: Floats  # (p, p) D H
    constant: Floats  # (n,) c S^-1 b of the constant part
    push: Floats  # (n, s) c S^-1 times the source matrix


class Place(NamedTuple):
    """Where the ports of one unit sit, and scratch arrays for their equations."""

    D: Floats  # (p, n)
    v0: Floats  # (p,)
    x_lin: Floats  # (n,)
    target: Floats  # (p,)
    move: Floats  # (p,)
    whole: Floats  # (p,)
    guess: Floats  # (p,)
    kept: Floats  # (p, p)
    matrix: Floats  # (p, p)


@hot
def new_place(D: Floats, v0: Floats) -> Place:
    """Scratch arrays at zero."""
    p, n = D.shape
    few = np.zeros((4, p))
    square = np.zeros((2, p, p))
    return Place(D, v0, np.zeros(n), few[0], few[1], few[2], few[3], square[0], square[1])


@hot
def make_ladder(circuit: Circuit, matrix: Floats, unit: int, longest: float, rungs: int) -> Rung:
    """Matrices of the step lengths h, h/2, h/4 ... in seconds, along a first axis."""
    n, p, s = circuit.E.shape[1], circuit.D.shape[0], matrix.shape[1]
    G, H = np.empty((rungs, n, n)), np.empty((rungs, n, p))
    K = np.empty((rungs, p, p))
    constant, push = np.empty((rungs, n)), np.zeros((rungs, n, s))
    P = np.ascontiguousarray(circuit.D.T)
    for k in range(rungs):
        c = 0.5 * GAMMA * longest * 0.5**k
        inverse = np.linalg.inv(circuit.E[unit] + c * circuit.F[unit])
        G[k] = inverse @ circuit.E[unit]
        H[k] = inverse @ P
        K[k] = circuit.D @ H[k]
        constant[k] = c * (inverse @ circuit.constant[unit])
        if s > 0:
            push[k] = c * (inverse @ matrix)
    return Rung(G, H, K, constant, push)


@hot
def rung_of(ladder: Rung, k: int) -> Rung:
    """Matrices of one step length."""
    return Rung(ladder.G[k], ladder.H[k], ladder.K[k], ladder.constant[k], ladder.push[k])


@hot
def add_product(matrix: Floats, vector: Floats, factor: float, out: Floats) -> None:
    """Add factor * matrix @ vector to `out`."""
    for i in range(matrix.shape[0]):
        total = 0.0
        for j in range(matrix.shape[1]):
            total += matrix[i, j] * vector[j]
        out[i] += factor * total


@hot
def add_push(rung: Rung, sources: Sources, time: float, out: Floats) -> None:
    """Add c S^-1 b(time) to `out`."""
    for i in range(len(out)):
        out[i] += rung.constant[i]
    for source in range(rung.push.shape[1]):
        now = level(sources, source, time)
        if now != 0.0:
            for i in range(len(out)):
                out[i] += rung.push[i, source] * now


@hot
def _linearise(rung: Rung, c: float, at: Point, place: Place) -> None:
    """I + K dw/dv at a point, into `place.kept`."""
    p = len(at.v)
    for i in range(p):
        for j in range(p):
            place.kept[i, j] = 0.0
        for k in range(p):
            for j in range(p):
                place.kept[i, j] += rung.K[i, k] * (at.c[k, j] + c * at.g[k, j])
        place.kept[i, i] += 1.0


@hot
def _correction(rung: Rung, c: float, at: Point, place: Place) -> bool:
    """Newton move of v + K w(v) = target by the matrix in `place.kept`; False if it is singular."""
    p = len(at.v)
    for i in range(p):
        left = place.target[i] - at.v[i]
        for j in range(p):
            left -= rung.K[i, j] * (at.q[j] + c * at.f[j])
            place.matrix[i, j] = place.kept[i, j]
        place.move[i] = left
    return bool(solve_small(place.matrix, place.move))


@hot
def _settle(at: Point, move: Floats) -> None:
    """One linear step, which keeps v + K w = target exact, so that charge is conserved."""
    for i in range(len(move)):
        for j in range(len(move)):
            at.q[i] += at.c[i, j] * move[j]
            at.f[i] += at.g[i, j] * move[j]
    for i in range(len(move)):
        at.v[i] += move[i]


@hot
def _newton(rung: Rung, c: float, e: FlatElements, place: Place, at: Point, trial: Point) -> int:
    """Solve the port equations from the voltages in `at`; rounds needed, 0 if not settled."""
    p = len(at.v)
    place.guess[:] = at.v
    for turn in range(QUICK_ROUNDS + CAREFUL_ROUNDS):
        if turn == QUICK_ROUNDS:
            at.v[:] = place.guess
        evaluate(e, at)
        _linearise(rung, c, at, place)
        if not _correction(rung, c, at, place):
            return 0
        size = 0.0
        for i in range(p):
            size = max(size, abs(place.move[i]))
        if size < PORT_TOLERANCE:
            _settle(at, place.move)
            return turn + 1
        if turn >= QUICK_ROUNDS:
            _shorten(rung, c, e, place, at, trial, size)
        for i in range(p):
            at.v[i] += place.move[i]
    return 0


@hot
def _shorten(
    rung: Rung, c: float, e: FlatElements, place: Place, at: Point, trial: Point, size: float
) -> None:
    """Halve the move until it leaves a smaller one, as `circuit.stepper` does."""
    whole, p = place.whole, len(at.v)
    whole[:] = place.move
    share = 1.0
    for _ in range(HALVINGS):
        for i in range(p):
            trial.v[i] = at.v[i] + share * whole[i]
        evaluate(e, trial)
        left = np.inf
        if _correction(rung, c, trial, place):
            left = 0.0
            for i in range(p):
                left = max(left, abs(place.move[i]))
        if left <= (1.0 - 0.25 * share) * size:
            break
        share *= 0.5
    for i in range(p):
        place.move[i] = share * whole[i]


@hot
def solve_stage(
    rung: Rung, c: float, e: FlatElements, place: Place, at: Point, trial: Point
) -> bool:
    """x = x_lin - H w(v) and y for `place.x_lin`; `at.v` is the guess of the port voltages."""
    place.target[:] = place.v0
    add_product(place.D, place.x_lin, 1.0, place.target)
    if _newton(rung, c, e, place, at, trial) == 0:
        return False
    for i in range(len(at.x)):
        at.x[i] = place.x_lin[i]
        for j in range(len(at.v)):
            at.x[i] -= rung.H[i, j] * (at.q[j] + c * at.f[j])
    charge_state(rung, at)
    return True


@hot
def charge_state(rung: Rung, at: Point) -> None:
    """y = G x + H q."""
    at.y[:] = 0.0
    add_product(rung.G, at.x, 1.0, at.y)
    add_product(rung.H, at.q, 1.0, at.y)


@hot
def trapezoid_part(
    rung: Rung, sources: Sources, time: float, step: float, at: Point, out: Floats
) -> None:
    """x_lin of the trapezoid stage."""
    c = 0.5 * GAMMA * step
    for i in range(len(out)):
        out[i] = 2.0 * at.y[i] - at.x[i]
        for j in range(len(at.v)):
            out[i] -= rung.H[i, j] * (at.q[j] + c * at.f[j])
    add_push(rung, sources, time, out)
    add_push(rung, sources, time + GAMMA * step, out)


@hot
def final_part(
    rung: Rung, sources: Sources, time: float, at: Point, inner: Point, out: Floats
) -> None:
    """x_lin of the BDF2 stage; `time` is that of its end."""
    for i in range(len(out)):
        out[i] = A * inner.y[i] - B * at.y[i]
    add_push(rung, sources, time, out)
