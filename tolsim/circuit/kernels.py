"""Device elements evaluated in place on (m, U) slabs: one element, all grid points, U units.

The same equations as `tolsim.circuit.devices`, without derivatives and temporaries; per-unit
numbers are rows of a parameter table (U,); everything runs in the precision of the slabs.
A ramp is written in units of its knee: with y = (u - offset)/s and S = s L(y), L = ln(1 + e^y),

    i = a S + b/2 S^2 = L (a s + b s^2/2 L).

Where 1 + e^y rounds to 1 at every point the current is exactly zero, so that skipping the element
changes no bit.
"""

from __future__ import annotations

from collections.abc import Callable, Collection
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.devices import (
    BiasedCapacitors,
    Devices,
    Elements,
    Floats,
    Junctions,
    Ramps,
    SaturatingCore,
)

SQUARE_ROOT = 0.5  # the usual grading, several times faster than a general power
Slab = NDArray[np.floating]  # (m, U) or (U,), float32 or float64
Weights = tuple[tuple[int, float], ...]  # (port, weight) of one row of `sense` or `inject`
Response = Callable[[Slab, "Rows", "Scratch"], "Slab | None"]
Rows = tuple[Slab, ...]  # the element's rows of the parameter table


@dataclass
class Scratch:
    """Slabs that elements may overwrite."""

    sum: Slab
    a: Slab
    b: Slab
    quiet: float  # below this y the logarithm is exactly zero

    @classmethod
    def of(cls, points: int, units: int, dtype: type[np.floating]) -> Scratch:
        """Scratch for slabs (points, units)."""
        shape = (points, units)
        quiet = float(np.log(np.finfo(dtype).eps)) - 2.0
        return cls(np.empty(shape, dtype), np.empty(shape, dtype), np.empty(shape, dtype), quiet)


@dataclass(frozen=True)
class Kernel:
    """One element: what it sees, how it responds, where it acts."""

    name: str
    kind: str  # "current" or "charge"
    sense: Weights
    inject: Weights
    rows: Floats  # (r, N) its per-unit numbers
    respond: Response

    def evaluate(self, v: Slab, rows: Rows, scratch: Scratch) -> Slab | None:
        """Current or charge (m, U) at port voltages v (p, m, U); None if exactly zero."""
        return self.respond(weighted(v, self.sense, scratch.sum), rows, scratch)


def weighted(v: Slab, weights: Weights, out: Slab) -> Slab:
    """Weighted sum of port voltages; a port seen as it is costs nothing."""
    (port, weight), *others = weights
    if not others and weight == 1.0:
        return v[port]
    np.multiply(v[port], weight, out=out)
    for other, share in others:
        if share == 1.0:
            out += v[other]
        elif share == -1.0:
            out -= v[other]
        else:
            out += share * v[other]
    return out


def kernels_of(
    devices: Devices, units: int, kind: str | None = None, names: Collection[str] | None = None
) -> tuple[Kernel, ...]:
    """Elements of a network's devices, with their per-unit numbers (r, N); all unless told."""
    found = []
    for elements in devices.elements:
        if kind is not None and elements.kind != kind:
            continue
        for place, name in enumerate(elements.names):
            if names is not None and name not in names:
                continue
            numbers, respond = _response(elements, place)
            rows = np.stack([np.broadcast_to(row, (units,)) for row in numbers])
            sense, inject = elements.sense[place], elements.inject[:, place]
            found.append(
                Kernel(name, elements.kind, _weights(sense), _weights(inject), rows, respond)
            )
    return tuple(found)


def _weights(row: Floats) -> Weights:
    return tuple((int(port), float(row[port])) for port in np.flatnonzero(row))


def _response(elements: Elements, place: int) -> tuple[list[Floats], Response]:
    match elements:
        case Ramps():
            return _ramp(elements, place)
        case Junctions():
            return _junction(elements, place)
        case BiasedCapacitors():
            return _biased(elements, place)
        case SaturatingCore():
            return _core(elements)
    raise TypeError(f"no kernel for {type(elements).__name__}")


def _ramp(elements: Ramps, place: int) -> tuple[list[Floats], Response]:
    """Rows: offset, a, b."""
    s = float(elements.knee[place, 0])
    square = bool(np.any(elements.square[place] != 0))
    linear = bool(np.any(elements.linear[place] != 0))

    def respond(u: Slab, rows: Rows, scratch: Scratch) -> Slab | None:
        offset, a, b = rows
        y = np.subtract(u, offset, out=scratch.a)
        y *= 1 / s
        if y.max() < scratch.quiet:
            return None
        log = np.abs(y, out=scratch.b)
        np.negative(log, out=log)
        np.exp(log, out=log)
        log += 1
        np.log(log, out=log)
        np.maximum(y, 0, out=y)
        log += y
        if not square:
            log *= a * log.dtype.type(s)
            return log
        y = np.multiply(log, b * log.dtype.type(0.5 * s * s), out=y)
        if linear:
            y += a * log.dtype.type(s)
        y *= log
        return y

    return [elements.offset[place], elements.linear[place], elements.square[place]], respond


def _junction(elements: Junctions, place: int) -> tuple[list[Floats], Response]:
    """Rows: c0."""
    phi, grading = float(elements.phi[place, 0]), float(elements.grading[place, 0])

    def respond(u: Slab, rows: Rows, scratch: Scratch) -> Slab:
        (c0,) = rows
        depth = np.maximum(u, 0, out=scratch.a)
        depth *= 1 / phi
        depth += 1
        if grading == SQUARE_ROOT:
            np.sqrt(depth, out=depth)
        else:
            np.power(depth, 1 - grading, out=depth)
        depth -= 1
        depth *= phi / (1 - grading)
        depth += np.minimum(u, 0, out=scratch.b)
        depth *= c0
        return depth

    return [elements.c0[place]], respond


def _biased(elements: BiasedCapacitors, place: int) -> tuple[list[Floats], Response]:
    """Rows: c0."""
    half, floor = float(elements.half[place, 0]), float(elements.floor[place, 0])

    def respond(u: Slab, rows: Rows, scratch: Scratch) -> Slab:
        (c0,) = rows
        x = np.multiply(u, 1 / half, out=scratch.a)
        charge = np.arctan(x, out=scratch.b)
        charge *= 1 - floor
        x *= floor
        charge += x
        charge *= c0 * c0.dtype.type(half)
        return charge

    return [elements.c0[place]], respond


def _core(elements: SaturatingCore) -> tuple[list[Floats], Response]:
    """Rows: inductance."""

    def respond(u: Slab, rows: Rows, scratch: Scratch) -> Slab:
        one = SaturatingCore(
            elements.names,
            np.ones((1, 1)),
            np.ones((1, 1)),
            np.ones((1, 1)),
            elements.currents,
            elements.shares,
        )
        share, _ = one.respond(np.asarray(u, dtype=float).reshape(1, -1))
        np.multiply(share.reshape(u.shape), rows[0], out=scratch.a, casting="same_kind")
        return scratch.a

    return [elements.inductance[0]], respond


def element_waves(
    devices: Devices, v: Floats, kind: str, names: Collection[str] | None = None
) -> dict[str, Floats]:
    """Waves of elements by name along port voltages v (p, m, N), (m, N) each.

    Parameters
    ----------
    kind : str
        "current" or "charge".
    names : collection of str, optional
        Elements wanted; all of that kind if None.
    """
    _, points, units = v.shape
    scratch = Scratch.of(points, units, np.float64)
    answer = {}
    for kernel in kernels_of(devices, units, kind, names):
        amount = kernel.evaluate(v, tuple(kernel.rows), scratch)
        idle = amount is None
        answer[kernel.name] = np.zeros((points, units)) if idle else np.array(amount, float)
    return answer
