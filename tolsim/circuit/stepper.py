"""One-step integrator TR-BDF2 for N units at once, condensed to the ports.

R. E. Bank et al., "Transient simulation of silicon devices and circuits", IEEE Trans. Electron
Devices ED-32 (1985) 1992-2007.  With gamma = 2 - sqrt 2 both stages share S = E + c F, where
c = gamma h/2:

    trapezoid   S xg + P(q_g + c f_g) = E x0 + P q0 - c (F x0 + P f0 - b0 - b_g)
    BDF2        S x1 + P(q_1 + c f_1) = a (E xg + P q_g) - b (E x0 + P q0) + c b_1

a = 1/(gamma (2 - gamma)), b = (1 - gamma)^2 a.  Written with w = q + c f, G = S^-1 E, H = S^-1 P,
y = G x + H q (the charge state), K = D H, a stage is

    x = x_lin - H w(v),      v + K w(v) = D x_lin + v0
    x_lin(trapezoid) = 2 y0 - x0 - H w0 + c S^-1 (b0 + b_g)
    x_lin(BDF2)      = a y_g - b y0 + c S^-1 b_1

so Newton runs only on the p port voltages.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.devices import Devices, Floats
from tolsim.circuit.network import Network

GAMMA = 2.0 - np.sqrt(2.0)
A = 1.0 / (GAMMA * (2.0 - GAMMA))
B = (1.0 - GAMMA) ** 2 * A

PORT_TOLERANCE = 1e-4  # V, last Newton correction of a port voltage (error after it: its square)
QUICK_ROUNDS = 8
ENOUGH_SETTLED = 0.99  # share of the units; one or two others go on alone
CAREFUL_ROUNDS = 60
HALVINGS = 10


@dataclass(frozen=True)
class StepMatrices:
    """The linear algebra of a step length: constant along the orbit of each unit."""

    c: Floats  # (N,)
    inverse: Floats  # (N, n, n) S^-1
    GH: Floats  # (N, n, n + p) [G, H]
    K: Floats  # (N, p, p)

    @classmethod
    def of(cls, network: Network, step: Floats) -> StepMatrices:
        """Matrices for step lengths (N,) in seconds."""
        c = 0.5 * GAMMA * step
        inverse = np.linalg.inv(network.E + c[:, None, None] * network.F)
        H = inverse @ network.D.T
        return cls(c, inverse, np.concatenate([inverse @ network.E, H], axis=2), network.D @ H)

    @property
    def G(self) -> Floats:
        """S^-1 E, (N, n, n)."""
        return self.GH[:, :, : self.inverse.shape[1]]

    @property
    def H(self) -> Floats:
        """S^-1 P, (N, n, p)."""
        return self.GH[:, :, self.inverse.shape[1] :]

    def charge_state(self, x: Floats, q: Floats) -> Floats:
        """y = G x + H q, (N, n)."""
        return apply(self.GH, np.concatenate([x, q], axis=1))

    def push(self, source: Floats) -> Floats:
        """c S^-1 b for a right-hand side b (N, n)."""
        return self.c[:, None] * apply(self.inverse, source)


@dataclass(frozen=True)
class PortState:
    """Port voltages with the charges, weights w = q + c f and Jacobians that belong to them."""

    v: Floats  # (N, p)
    q: Floats  # (N, p)
    w: Floats  # (N, p)
    C: Floats  # (N, p, p) dq/dv
    W: Floats  # (N, p, p) dw/dv
    matrix: Floats  # (N, p, p) I + K W
    settled: NDArray[np.bool_]  # (N,)


def apply(matrix: Floats, vector: Floats) -> Floats:
    """Matrix times vector for each unit: (N, i, j) x (N, j) -> (N, i)."""
    product: Floats = np.matmul(matrix, vector[:, :, None])[:, :, 0]
    return product


def measure(devices: Devices, c: Floats, v: Floats) -> PortState:
    """Evaluate the devices at given port voltages."""
    f, q, g, dq = devices.evaluate(v)
    return PortState(
        v=v,
        q=q,
        w=q + c[:, None] * f,
        C=dq,
        W=dq + c[:, None, None] * g,
        matrix=np.broadcast_to(np.eye(v.shape[1]), g.shape),
        settled=np.ones(v.shape[0], dtype=bool),
    )


def solve_ports(devices: Devices, c: Floats, K: Floats, target: Floats, guess: Floats) -> PortState:
    """Solve v + K w(v) = target by Newton; units still open after a few rounds go on alone.

    Parameters
    ----------
    c : (N,)
    K : (N, p, p)
    target, guess : (N, p)
    """
    identity = np.eye(target.shape[1])
    across, square = c[:, None], c[:, None, None]
    v = guess
    for _ in range(QUICK_ROUNDS):
        f, q, g, dq = devices.evaluate(v)
        w, W = q + across * f, dq + square * g
        matrix = identity + K @ W
        correction = _correction(matrix, v + apply(K, w) - target)
        size = np.abs(correction).max(axis=1, initial=0.0)
        settled = size < PORT_TOLERANCE
        v = v + correction
        # a unit that is not a number any more is not waited for
        if not (size >= PORT_TOLERANCE).any() or settled.mean() > ENOUGH_SETTLED:
            break
    # one linear step keeps v + K w = target exact, so that charge is conserved to round-off
    state = PortState(
        v=v,
        q=q + apply(dq, correction),
        w=w + apply(W, correction),
        C=dq,
        W=W,
        matrix=matrix,
        settled=settled,
    )
    if settled.all():
        return state
    return _finish_stragglers(devices, c, K, target, guess, state)


def _finish_stragglers(
    devices: Devices, c: Floats, K: Floats, target: Floats, guess: Floats, state: PortState
) -> PortState:
    """Damped Newton for the units that have not settled, from the same guess."""
    open_units = np.flatnonzero(~state.settled)
    careful = _solve_damped(
        devices.take(open_units),
        c[open_units],
        K[open_units],
        target[open_units],
        guess[open_units],
    )
    merged = {}
    for name in ("v", "q", "w", "C", "W", "matrix", "settled"):
        whole = getattr(state, name).copy()
        whole[open_units] = getattr(careful, name)
        merged[name] = whole
    return PortState(**merged)


def _solve_damped(
    devices: Devices, c: Floats, K: Floats, target: Floats, guess: Floats
) -> PortState:
    """Newton with a natural monotonicity test, for sharp diodes and clamps.

    A net without linear capacitance sees an impedance of 1e9 ohm and more: residuals in volts then
    mean nothing.  A step is judged by the correction it leaves, -A^-1 r(trial), which has the size
    of the error itself (Deuflhard, "Newton Methods for Nonlinear Problems", 2004, section 3.1).
    """
    identity = np.eye(target.shape[1])
    v = np.where(np.isfinite(guess), guess, 0.0)
    for _ in range(CAREFUL_ROUNDS):
        here = measure(devices, c, v)
        matrix = identity + K @ here.W
        correction = _correction(matrix, v + apply(K, here.w) - target)
        size = np.abs(correction).max(axis=1)
        settled = size < PORT_TOLERANCE
        finished = settled | ~np.isfinite(size)  # from nowhere no correction leads back
        if finished.all():
            break
        share = np.ones(len(v))
        for _ in range(HALVINGS):
            trial = v + share[:, None] * correction
            left = _correction(matrix, trial + apply(K, measure(devices, c, trial).w) - target)
            # written so that a trial that is not finite counts as too long
            fine = np.abs(left).max(axis=1) <= (1 - 0.25 * share) * size
            too_long = ~(fine | finished)
            if not too_long.any():
                break
            share = np.where(too_long, 0.5 * share, share)
        v = np.where(finished[:, None], v, trial)
    return PortState(
        v=v + correction,
        q=here.q + apply(here.C, correction),
        w=here.w + apply(here.W, correction),
        C=here.C,
        W=here.W,
        matrix=matrix,
        settled=settled,
    )


def _correction(matrix: Floats, residual: Floats) -> Floats:
    """-A^-1 r for each unit, (N, p)."""
    return -solve_each(matrix, residual[:, :, None])[:, :, 0]


def solve_each(matrix: Floats, sides: Floats) -> Floats:
    """A^-1 b for each unit; NaN for one that ran away so far that its matrix is singular."""
    try:
        return np.asarray(np.linalg.solve(matrix, sides), dtype=np.float64)
    except np.linalg.LinAlgError:
        lost = np.linalg.slogdet(matrix).sign == 0
        sound = np.where(lost[:, None, None], np.eye(matrix.shape[1]), matrix)
        answer = np.asarray(np.linalg.solve(sound, sides), dtype=np.float64)
        answer[lost] = np.nan
        return answer


@dataclass(frozen=True)
class Sensitivity:
    """Derivatives of a point with respect to the start (and the period): m columns."""

    dx: Floats  # (N, n, m)
    dy: Floats  # (N, n, m)
    dw: Floats  # (N, p, m)


@dataclass(frozen=True)
class Point:
    """State of N units at one instant, as the stepper carries it."""

    x: Floats  # (N, n)
    y: Floats  # (N, n)
    port: PortState

    @property
    def settled(self) -> NDArray[np.bool_]:
        """Whether the port voltages were found, (N,)."""
        return self.port.settled


class Stepper:
    """Steps of one length along the circuits of N units."""

    def __init__(self, network: Network, step: Floats) -> None:
        self.network = network
        self.step = step
        self.matrices = StepMatrices.of(network, step)
        self._constant_push = self.matrices.push(network.source)

    def start(self, x: Floats) -> Point:
        """The point at states x (N, n)."""
        port = measure(self.network.devices, self.matrices.c, self.network.port_voltages(x))
        return Point(x, self.matrices.charge_state(x, port.q), port)

    def start_sensitivity(self, point: Point, *, with_period: bool) -> Sensitivity:
        """Columns d/dx0 = I, and d/dT = 0 when the period is unknown."""
        units, n = point.x.shape
        columns = n + int(with_period)
        dx = np.zeros((units, n, columns))
        dx[:, np.arange(n), np.arange(n)] = 1.0
        dv = self.network.D @ dx
        dy = self.matrices.G @ dx + self.matrices.H @ (point.port.C @ dv)
        return Sensitivity(dx, dy, point.port.W @ dv)

    def push(self, phase: float) -> Floats:
        """c S^-1 b at a phase of the drive."""
        if self.network.drive_matrix is None:
            return self._constant_push
        return self.matrices.push(self.network.source_at(phase))

    def stage(self, x_lin: Floats, guess: Floats) -> Point:
        """Solve one stage for its linear part x_lin (N, n)."""
        m = self.matrices
        target = self.network.port_voltages(x_lin)
        port = solve_ports(self.network.devices, m.c, m.K, target, guess)
        x = x_lin - apply(m.H, port.w)
        return Point(x, m.charge_state(x, port.q), port)

    def stage_sensitivity(self, dx_lin: Floats, point: Point) -> Sensitivity:
        """Derivatives of a solved stage from those of its linear part (N, n, m)."""
        m, port = self.matrices, point.port
        dv = solve_each(port.matrix, self.network.D @ dx_lin)
        dw = port.W @ dv
        dx = dx_lin - m.H @ dw
        return Sensitivity(dx, m.G @ dx + m.H @ (port.C @ dv), dw)

    def trapezoid_part(self, point: Point, phase: float, share: float) -> Floats:
        """x_lin of the trapezoid stage from `phase` to `phase + share`."""
        linear = 2.0 * point.y - point.x - apply(self.matrices.H, point.port.w)
        return linear + self.push(phase) + self.push(phase + share)

    def trapezoid_sensitivity(self, before: Sensitivity) -> Floats:
        """Derivatives (N, n, m) of the trapezoid stage's linear part."""
        return 2.0 * before.dy - before.dx - self.matrices.H @ before.dw
