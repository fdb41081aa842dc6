"""The element laws of `circuit.devices`, compiled, for one unit at a time.

`evaluate` fills the port currents f, the port charges q and their Jacobians at port voltages v.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from tolsim.circuit.devices import SQUARE_ROOT, Floats
from tolsim.circuit.transients.compiling import hot
from tolsim.circuit.transients.elements import FlatElements

FAR = 36.0  # knees away from its corner a smooth ramp is its asymptote to the last bit


class Point(NamedTuple):
    """One unit at one instant: states, charge state, port voltages and what the devices answer."""

    x: Floats  # (n,)
    y: Floats  # (n,)
    v: Floats  # (p,)
    f: Floats  # (p,) A
    q: Floats  # (p,) C
    g: Floats  # (p, p) df/dv
    c: Floats  # (p, p) dq/dv
    value: Floats  # (e,) answer of every element
    slope: Floats  # (e,)


@hot
def new_point(n: int, p: int, e: int) -> Point:
    """All zero."""
    g, c = np.zeros((p, p)), np.zeros((p, p))
    return Point(
        np.zeros(n),
        np.zeros(n),
        np.zeros(p),
        np.zeros(p),
        np.zeros(p),
        g,
        c,
        np.zeros(e),
        np.zeros(e),
    )


@hot
def unit_elements(e: FlatElements, unit: int) -> FlatElements:
    """The elements of one unit."""
    return FlatElements(
        e.ends,
        e.sense,
        e.inject,
        e.entry_to,
        e.entry_seen,
        e.entry_element,
        e.entry_weight,
        e.numbers[unit],
        e.core_breaks,
        e.core_share,
        e.core_area,
    )


@hot
def _polynomial(pieces: Floats, breaks: Floats, x: float) -> float:
    """Value of a piecewise polynomial at x within its breaks."""
    piece = 0
    while piece < pieces.shape[1] - 1 and x >= breaks[piece + 1] and breaks[piece + 1] < breaks[-1]:
        piece += 1
    value = 0.0
    for power in range(pieces.shape[0]):
        value = value * (x - breaks[piece]) + pieces[power, piece]
    return value


@hot
def _core(e: FlatElements, row: int, inductance: float, current: float) -> tuple[float, float]:
    """Flux beyond the constant part, Wb, and its slope, H."""
    size, last = abs(current), e.core_breaks[row, -1]
    inside = min(size, last)
    share = _polynomial(e.core_share[row], e.core_breaks[row], inside)
    at_end = _polynomial(e.core_share[row], e.core_breaks[row], last)
    area = _polynomial(e.core_area[row], e.core_breaks[row], inside) + at_end * (size - inside)
    missing = size - area if current < 0.0 else area - size
    return inductance * missing, inductance * (share - 1.0)


@hot
def respond(e: FlatElements, at: Point) -> None:
    """Fill value and slope of every element at the port voltages."""
    value, slope, numbers = at.value, at.slope, e.numbers
    for row in range(len(value)):
        u = 0.0
        for j in range(len(at.v)):
            u += e.sense[row, j] * at.v[j]
        value[row] = u
    for row in range(e.ends[0]):
        u, s = value[row] - numbers[row, 0], numbers[row, 1]
        if u < -FAR * s:
            value[row] = 0.0
            slope[row] = 0.0
            continue
        ramp, steep = u, 1.0
        if u < FAR * s:
            decay = math.exp(-abs(u) / s)
            total = 1.0 + decay
            ramp = max(u, 0.0) + s * math.log(total)
            steep = (1.0 if u >= 0.0 else decay) / total
        half = 0.5 * numbers[row, 3] * ramp
        value[row] = (numbers[row, 2] + half) * ramp
        slope[row] = (numbers[row, 2] + 2.0 * half) * steep
    for row in range(e.ends[0], e.ends[1]):
        u, c0, phi, m = value[row], numbers[row, 0], numbers[row, 1], numbers[row, 2]
        if u <= 0.0:
            value[row] = c0 * u
            slope[row] = c0
            continue
        stretch = 1.0 + u / phi
        power = math.sqrt(stretch) if m == SQUARE_ROOT else stretch**m
        value[row] = c0 * phi / (1.0 - m) * (stretch / power - 1.0)
        slope[row] = c0 / power
    for row in range(e.ends[1], e.ends[2]):
        c0, half_volts, floor = numbers[row, 0], numbers[row, 1], numbers[row, 2]
        x = value[row] / half_volts
        value[row] = c0 * half_volts * (floor * x + (1.0 - floor) * math.atan(x))
        slope[row] = c0 * (floor + (1.0 - floor) / (1.0 + x * x))
    for row in range(e.ends[2], e.ends[3]):
        value[row], slope[row] = _core(e, row - e.ends[2], numbers[row, 0], value[row])


@hot
def evaluate(e: FlatElements, at: Point) -> None:
    """Fill currents, charges and Jacobians at the port voltages."""
    respond(e, at)
    p, ramps = len(at.v), e.ends[0]
    for i in range(p):
        current, charge = 0.0, 0.0
        for row in range(ramps):
            current += e.inject[i, row] * at.value[row]
        for row in range(ramps, len(at.value)):
            charge += e.inject[i, row] * at.value[row]
        at.f[i] = current
        at.q[i] = charge
        for j in range(p):
            at.g[i, j] = 0.0
            at.c[i, j] = 0.0
    for m in range(len(e.entry_to)):
        row = e.entry_element[m]
        add = e.entry_weight[m] * at.slope[row]
        if row < ramps:
            at.g[e.entry_to[m], e.entry_seen[m]] += add
        else:
            at.c[e.entry_to[m], e.entry_seen[m]] += add


@hot
def _bring_pivot(matrix: Floats, side: Floats, k: int) -> bool:
    """Exchange rows so that the largest entry left in column k leads; False if all are zero."""
    pivot = k
    for row in range(k + 1, len(side)):
        if abs(matrix[row, k]) > abs(matrix[pivot, k]):
            pivot = row
    if not abs(matrix[pivot, k]) > 0.0:
        return False
    if pivot != k:
        for column in range(k, len(side)):
            matrix[k, column], matrix[pivot, column] = matrix[pivot, column], matrix[k, column]
        side[k], side[pivot] = side[pivot], side[k]
    return True


@hot
def solve_small(matrix: Floats, side: Floats) -> bool:
    """Solve A y = b in place by elimination with row exchange; False if A is singular."""
    p = len(side)
    for k in range(p):
        if not _bring_pivot(matrix, side, k):
            return False
        inverse = 1.0 / matrix[k, k]
        for row in range(k + 1, p):
            factor = matrix[row, k] * inverse
            if factor != 0.0:
                for column in range(k + 1, p):
                    matrix[row, column] -= factor * matrix[k, column]
                side[row] -= factor * side[k]
    sound = True
    for k in range(p - 1, -1, -1):
        for column in range(k + 1, p):
            side[k] -= matrix[k, column] * side[column]
        side[k] /= matrix[k, k]
        sound = sound and math.isfinite(side[k])
    return sound
