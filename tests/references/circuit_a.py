"""Reference circuit A: a push-pull stage with capacitive gate feedback, written out by hand.

State x = (a, b, p, q, ga, gb, ia, ib, iL): drains, coil ends, gates (volts), choke
currents vdd to a and vdd to b, coil current p to q (amperes).  Kirchhoff's current law
at the six nets with the coupling capacitors written term by term gives a 6 x 6
capacitance matrix, which depends on the voltages through Cgd(vdg) and Cds(vds).
"""

from __future__ import annotations

from dataclasses import astuple, dataclass
from functools import cache

import numpy as np
from scipy.integrate import solve_ivp
from scipy.optimize import root

from references.compiled import compiled
from references.devices import junction, soft
from references.orbit import Array, Method, Orbit, Slope, settle, transient

Pair = tuple[float, float]
A, B, P, Q, GA, GB, IA, IB, IL = range(9)
PIN = np.eye(9)[P] - np.eye(9)[Q]  # phase: coil voltage rises through zero


@dataclass(frozen=True)
class Values:
    """Part values, SI; a pair is (side a, side b)."""

    supply: float = 24.0
    bias: float = 4.2
    choke: Pair = (18e-6, 18e-6)
    choke_resistance: Pair = (60e-3, 60e-3)
    shunt: Pair = (3.0e-9, 3.0e-9)
    coupling: Pair = (510e-12, 510e-12)  # a-p, b-q
    stray: float = 5e-12  # p-q
    coil: float = 2.2e-6
    coil_resistance: float = 3.6
    feedback: Pair = (75e-12, 75e-12)  # q-ga, p-gb
    gate_capacitor: Pair = (1.6e-9, 1.6e-9)
    bias_resistor: Pair = (3.3e3, 3.3e3)
    pull_down: Pair = (47e3, 47e3)
    threshold: Pair = (3.4, 3.4)
    gain: Pair = (11.0, 11.0)
    cgd0: Pair = (280e-12, 280e-12)
    cds0: Pair = (1400e-12, 1400e-12)
    knee: float = 0.15
    junction_potential: float = 0.8
    grading: float = 0.5
    body_voltage: float = 0.75
    body_conductance: float = 50.0
    body_knee: float = 0.05
    clamp_voltage: float = 18.0
    clamp_conductance: float = 5.0
    clamp_knee: float = 0.2
    leak: float = 1e-8

    def flat(self) -> Array:
        """All numbers in field order, shape (39,)."""
        return np.hstack([np.atleast_1d(value) for value in astuple(self)])


@compiled
def _slope(x: Array, w: Array) -> Array:
    """dx/dt of the nine states; `w` is `Values.flat()`."""
    vdd, vb, cpq, coil, rcoil = w[0], w[1], w[10], w[11], w[12]
    s, phi, m = w[29], w[30], w[31]
    leak = w[38]
    cap = np.zeros((6, 6))
    inflow = np.zeros(6)
    rate = np.empty(9)
    for side in range(2):
        drain, gate = side, 4 + side
        own_end, far_end = 2 + side, 3 - side
        vds, vgs = x[drain], x[gate]
        c_shunt, c_couple = w[6 + side], w[8 + side]
        c_feed, c_gate = w[13 + side], w[15 + side]
        r_bias, r_down = w[17 + side], w[19 + side]
        vt, k = w[21 + side], w[23 + side]
        cgd = junction(w[25 + side], vds - vgs, phi, m)
        cds = junction(w[27 + side], vds, phi, m)
        channel = 0.5 * k * (soft(vgs - vt, s) ** 2 - soft(vgs - vds - vt, s) ** 2)
        body = w[33] * soft(-vds - w[32], w[34])
        clamp = w[36] * (soft(vgs - w[35], w[37]) - soft(-vgs - w[35], w[37]))
        inflow[drain] += x[6 + side] - channel + body - leak * vds
        inflow[gate] += (vb - vgs) / r_bias - vgs / r_down - clamp - leak * vgs
        inflow[own_end] -= leak * x[own_end]
        cap[drain, drain] += c_shunt + cds + c_couple + cgd
        cap[drain, own_end] -= c_couple
        cap[own_end, drain] -= c_couple
        cap[own_end, own_end] += c_couple
        cap[drain, gate] -= cgd
        cap[gate, drain] -= cgd
        cap[gate, gate] += c_gate + cgd + c_feed
        cap[gate, far_end] -= c_feed
        cap[far_end, gate] -= c_feed
        cap[far_end, far_end] += c_feed
        rate[6 + side] = (vdd - w[4 + side] * x[6 + side] - vds) / w[2 + side]
    cap[2, 2] += cpq
    cap[3, 3] += cpq
    cap[2, 3] -= cpq
    cap[3, 2] -= cpq
    inflow[2] -= x[8]
    inflow[3] += x[8]
    rate[:6] = np.linalg.solve(cap, inflow)
    rate[8] = (x[2] - x[3] - rcoil * x[8]) / coil
    return rate


def slope_of(values: Values) -> Slope:
    """Right-hand side f(t, x) of one set of part values, compiled when numba is there."""
    flat = values.flat()

    def slope(_t: float, x: Array) -> Array:
        return np.asarray(_slope(x, flat))

    return slope


def power_on(values: Values, rise: float, duration: float, rtol: float) -> tuple[Array, Array]:
    """Times (m,) and states (9, m) from zero charge, both supplies rising in equal parts."""
    flat = values.flat()

    def slope(t: float, x: Array) -> Array:
        now = flat.copy()
        now[:2] *= min(t / rise, 1.0)
        return np.asarray(_slope(x, now))

    start, times, states = np.zeros(9), [], []
    for span in ((0.0, rise), (rise, duration)):  # the corner is no place to step across
        answer = solve_ivp(slope, span, start, method="LSODA", rtol=rtol, atol=rtol * 1e-2)
        start = answer.y[:, -1]
        times.append(answer.t)
        states.append(answer.y)
    return np.hstack(times), np.hstack(states)


def bias_point(values: Values) -> Array:
    """DC state, shape (9,)."""
    slope = slope_of(values)
    guess = np.array([values.supply] * 2 + [0.0] * 2 + [values.bias * 0.93] * 2 + [1.0, 1.0, 0.0])
    time = np.array([1e-9] * 6 + [1e-6] * 3)  # brings the slopes to volts and amperes

    def residual(x: Array) -> Array:
        return np.asarray(slope(0.0, x) * time)

    answer = root(residual, guess, method="hybr", tol=1e-13)
    point: Array = np.array(answer.x, dtype=float)
    return point


def start_mode(values: Values) -> complex:
    """Fastest growing (or slowest dying) oscillating eigenvalue at the bias point, 1/s."""
    slope, x = slope_of(values), bias_point(values)
    jacobian = np.empty((9, 9))
    for j in range(9):
        step = np.zeros(9)
        step[j] = 1e-5
        jacobian[:, j] = (slope(0.0, x + step) - slope(0.0, x - step)) / 2e-5
    roots = np.linalg.eigvals(jacobian)
    ringing = roots[roots.imag > 1e3]
    return complex(ringing[np.argmax(ringing.real)])


def kicked(values: Values, size: float = 1.0) -> Array:
    """Bias point with the gates pushed apart by `size` volts."""
    x = bias_point(values)
    x[GA] += 0.5 * size
    x[GB] -= 0.5 * size
    return x


@cache  # several tests ask for the nominal one
def settled_orbit(values: Values, cycles: int = 80) -> Orbit:
    """Settled orbit: a kicked transient of about `cycles`, then Newton on the period map."""
    slope = slope_of(values)
    ringing = 2.0 * np.pi / abs(start_mode(values).imag)
    start, period = transient(slope, kicked(values), cycles * ringing, PIN)
    return settle(slope, start, period, PIN)


def run_cycles(values: Values, duration: float, *, method: Method, rtol: float) -> Array:
    """Plain transient from a kick: the yardstick of the speed comparison.  Last state, (9,)."""
    answer = solve_ivp(
        slope_of(values),
        (0.0, duration),
        kicked(values),
        method=method,
        rtol=rtol,
        atol=rtol * 1e-2,
    )
    return np.asarray(answer.y[:, -1])
