"""Inverse of the Jacobian at one orbit, condensed to the ports.

Nonlinear devices see the circuit only through their p ports.  With g0, c0 the means of the port
conductances g(t) and capacitances c(t) along the orbit, and N what is left of them, the Jacobian
of the waves is

    J = L + P N P',   L_k = F + P g0 P' + j k w (E + P c0 P'),   N = T(g - g0) + w D T(c - c0),

L falling apart into one n x n block per harmonic k, T(g) the product with g(t) as a matrix on
Fourier coefficients.  With b bordering unknowns (frequency, junctions) of columns B, rows C and
corner d, a correction for the residual (r, rho) costs one dense system of p K + b unknowns in the
place of n K + b:

    [ I + Z N         P' L^-1 B    ] [v  ]   [ P' L^-1 r      ]
    [ -C L^-1 P N     d - C L^-1 B ] [tau] = [ rho - C L^-1 r ],     Z = P' L^-1 P,

    x = L^-1 (r - P N v - B tau)

(block elimination; Golub, Van Loan, "Matrix Computations", 4th ed., 2013, 2.1.4).  Taking the means
into L keeps nets that are held by devices alone well conditioned in single precision.

Inside, coefficients are ordered (harmonic; cosine, sine; state): all constants first, then
cosines and sines of harmonic 1, and so on, so that each block is one small matrix product.
"""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.bulk.grid import Grid
from tolsim.circuit.bulk.residual import HEAT_SCALE, Residual
from tolsim.circuit.devices import Floats, Ints
from tolsim.circuit.network import Network
from tolsim.circuit.thermal import Case

PROBE = 1e-6  # step of the measured border columns, in scaled unknowns

Array = NDArray[np.floating]


class SingularError(ArithmeticError):
    """The Jacobian has no inverse, or entries that are no numbers."""


@dataclass(frozen=True)
class Blocks:
    """One real matrix per harmonic: `constant` (a, b), `waves` (H, 2 a, 2 b)."""

    constant: Array
    waves: Array

    @classmethod
    def of(cls, blocks: NDArray[np.inexact]) -> Blocks:
        """Real form of (H + 1, a, b) on phasors c - j s: c' = A c + B s, s' = A s - B c."""
        A, B = blocks[1:].real, blocks[1:].imag
        upper, lower = np.concatenate([A, B], axis=2), np.concatenate([-B, A], axis=2)
        return cls(blocks[0].real, np.concatenate([upper, lower], axis=1))

    def times(self, x: Array, out: Array | None = None) -> Array:
        """Product with coefficients (b K, M) in the order of this module: (a K, M)."""
        (a, b), harmonics, count = self.constant.shape, len(self.waves), x.shape[1]
        if out is None:
            out = np.empty((a * (1 + 2 * harmonics), count), x.dtype)
        np.matmul(self.constant, x[:b], out=out[:a])
        inner = x[b:].reshape(harmonics, 2 * b, count)
        np.matmul(self.waves, inner, out=out[a:].reshape(harmonics, 2 * a, count))
        return out


@dataclass(frozen=True)
class Inverse:
    """J^-1 in parts; `Corrector` applies it."""

    states: int
    harmonics: int
    spread: Blocks  # L^-1, n x n
    sensed: Blocks  # P' L^-1, p x n
    acting: Blocks  # L^-1 P, n x p
    dense: Array  # (p K + b, p K + b): (P' L^-1 r, rho - C L^-1 r) -> (N v, tau)
    rows: Array  # C (b, n K)
    columns: Array  # L^-1 B (n K, b)

    def single(self) -> Inverse:
        """The same in single precision."""
        parts: dict[str, object] = {}
        for each in fields(self):
            part = getattr(self, each.name)
            if isinstance(part, Blocks):
                waves = part.waves.astype(np.float32)
                parts[each.name] = Blocks(part.constant.astype(np.float32), waves)
            elif isinstance(part, np.ndarray):
                parts[each.name] = part.astype(np.float32)
        return Inverse(self.states, self.harmonics, **parts)  # type: ignore[arg-type]

    def corrector(self, units: int) -> Corrector:
        """Work space for U units."""
        return Corrector(self, units)


class Corrector:
    """Corrections -J^-1 R of U units side by side."""

    def __init__(self, inverse: Inverse, units: int) -> None:
        self.inverse = inverse
        n, size = inverse.states, 2 * inverse.harmonics + 1
        dtype = inverse.dense.dtype
        self._gap = np.empty((n * size, units), dtype)
        self._wave, self._back = np.empty_like(self._gap), np.empty_like(self._gap)
        self._asked = np.empty((len(inverse.dense), units), dtype)
        self._given = np.empty_like(self._asked)
        self._out = np.empty((n * size + len(inverse.rows), units), dtype)

    def __call__(self, gap: Floats) -> Array:
        """-J^-1 R (unknowns, U) of residuals R; the array is overwritten by the next call."""
        inverse, wave, asked, given = self.inverse, self._wave, self._asked, self._given
        borders = len(inverse.rows)
        ports = len(asked) - borders
        self._pack(gap)
        inverse.spread.times(self._gap, wave)
        inverse.sensed.times(self._gap, asked[:ports])
        if borders:
            np.matmul(inverse.rows, wave, out=asked[ports:])
            np.subtract(gap[len(wave) :], asked[ports:], out=asked[ports:], casting="same_kind")
        np.matmul(inverse.dense, asked, out=given)
        inverse.acting.times(given[:ports], self._back)
        np.subtract(self._back, wave, out=wave)
        if borders:
            np.matmul(inverse.columns, given[ports:], out=self._back)
            wave += self._back
            np.negative(given[ports:], out=self._out[len(wave) :])
        self._unpack()
        return self._out

    def _views(self, natural: Array, packed: Array) -> tuple[tuple[Array, Array], ...]:
        """Constants, and waves, of both orders, seen in the same shape."""
        n, harmonics, units = self.inverse.states, self.inverse.harmonics, packed.shape[1]
        states = natural[: len(packed)].reshape(n, -1, units)
        waves = states[:, 1:].reshape(n, 2, harmonics, units).transpose(2, 1, 0, 3)
        inner = packed[n:].reshape(harmonics, 2, n, units)
        return (states[:, 0], packed[:n]), (waves, inner)

    def _pack(self, gap: Floats) -> None:
        for natural, packed in self._views(gap, self._gap):
            np.copyto(packed, natural, casting="same_kind")

    def _unpack(self) -> None:
        for natural, packed in self._views(self._out, self._wave):
            natural[...] = packed


def inverse_at(case: Case, residual: Residual, z: Floats) -> Inverse:
    """J^-1 at the unknowns z of one unit, which sits in all slots of the residual.

    Parameters
    ----------
    case : Case
        That unit.
    z : (unknowns,)

    Raises
    ------
    SingularError
        If there is none.
    """
    grid, topology = residual.grid, residual.topology
    n, ports = topology.states, len(residual.table.network.D)
    waves = n * grid.size
    network, omega = _network_at(case, residual, z), float(residual.omega(z[:, None])[0])
    conductance, capacitance = _along(network, residual, z)
    try:
        mean = _means(network, conductance, capacitance, omega, residual)
        near = np.asarray(np.linalg.inv(mean), dtype=np.complex128)
    except np.linalg.LinAlgError as problem:
        raise SingularError("the mean network is singular") from problem
    sense, act = network.D * topology.scale, network.D.T
    spread, sensed, acting = (Blocks.of(each) for each in (near, sense @ near, near @ act))
    N = _products(conductance, capacitance, omega, grid)
    columns, corner, rows = _borders(residual, z)
    order = _packed(n, grid)
    columns, rows = columns[order], rows[:, order]
    reached = spread.times(columns)
    loop = np.eye(ports * grid.size) + Blocks.of(sense @ near @ act).times(N)
    full = np.block(
        [
            [loop, sensed.times(columns)],
            [-rows @ acting.times(N), corner - rows @ reached],
        ]
    )
    last = np.block(
        [
            [N, np.zeros((len(N), len(corner)))],
            [np.zeros((len(corner), len(N))), np.eye(len(corner))],
        ]
    )
    if not np.isfinite(full).all():
        raise SingularError("the Jacobian has entries that are no numbers")
    try:
        dense = np.linalg.solve(full.T, last.T).T
    except np.linalg.LinAlgError as problem:
        raise SingularError("the Jacobian is singular") from problem
    assert len(order) == waves
    return Inverse(n, grid.harmonics, spread, sensed, acting, dense, rows, reached)


def _network_at(case: Case, residual: Residual, z: Floats) -> Network:
    """The circuit of the unit at the junction temperatures among its unknowns."""
    heated = residual.topology.heated
    celsius = z[len(z) - len(heated) :] * HEAT_SCALE
    junctions = dict(zip(heated, celsius[:, None], strict=True))
    return case.network(case.cold_junctions() | junctions)


def _along(network: Network, residual: Residual, z: Floats) -> tuple[Floats, Floats]:
    """Port conductances and capacitances (m, p, p) along the orbit."""
    grid, topology = residual.grid, residual.topology
    x = z[: topology.states * grid.size].reshape(topology.states, grid.size)
    v = grid.synthesis @ (x.T * topology.scale) @ network.D.T + network.v0
    devices = network.devices.take(np.zeros(grid.points, dtype=np.intp))
    _, _, conductance, capacitance = devices.evaluate(v)
    return conductance, capacitance


def _means(
    network: Network, conductance: Floats, capacitance: Floats, omega: float, residual: Residual
) -> NDArray[np.complex128]:
    """L (H + 1, n, n) on scaled states."""
    D, harmonics = network.D, residual.grid.harmonics
    F = network.F[0] + D.T @ conductance.mean(axis=0) @ D
    E = network.E[0] + D.T @ capacitance.mean(axis=0) @ D
    turning = 1j * omega * np.arange(harmonics + 1)[:, None, None]
    return np.asarray((F + turning * E) * residual.topology.scale)


def _products(conductance: Floats, capacitance: Floats, omega: float, grid: Grid) -> Floats:
    """N (p K, p K), in the order of this module."""
    ports, size = conductance.shape[1], grid.size
    natural = np.zeros((ports, size, ports, size))
    for wave, stored in ((conductance, False), (capacitance, True)):
        left = wave - wave.mean(axis=0)
        for i, j in np.argwhere(np.any(left != 0, axis=0)):
            matrix = grid.analysis @ (left[:, i, j, None] * grid.synthesis)
            natural[i, :, j] += omega * grid.derive(matrix) if stored else matrix
    order = _packed(ports, grid)
    return natural.reshape(ports * size, ports * size)[np.ix_(order, order)]


def _borders(residual: Residual, z: Floats) -> tuple[Floats, Floats, Floats]:
    """Columns B (n K, b) and corner d (b, b) by differences, rows C (b, n K)."""
    waves = residual.topology.states * residual.grid.size
    extra = np.arange(waves, len(z))
    probes = np.repeat(z[:, None], residual.units, axis=1)
    places = np.arange(len(extra))
    probes[extra, places] += PROBE
    probes[extra, places + len(extra)] -= PROBE
    value = residual.evaluate(probes)
    change = (value[:, places] - value[:, places + len(extra)]) / (2 * PROBE)
    return change[:waves], change[waves:], residual.border_rows(z)


def _packed(rows: int, grid: Grid) -> Ints:
    """Place in (row, coefficient) order of every entry in the order of this module."""
    places = np.arange(rows * grid.size).reshape(rows, grid.size)
    waves = places[:, 1:].reshape(rows, 2, grid.harmonics).transpose(2, 1, 0)
    return np.concatenate([places[:, 0], waves.ravel()])
