"""Reference circuit C: single-ended stage with capacitive feedback divider, written by hand.

Not a demo but a check of one-switch stages and of a coupled load.  Nets: vdd, vb
(ideal rails), drain d, coil start e, foot x, tap y, gate g.  State
(d, e, x, y, g, ic, iL, iw): net voltages, choke current vdd to d, coil current e to x,
current of the coupled loop.
"""

from __future__ import annotations

from dataclasses import astuple, dataclass

import numpy as np

from references.compiled import compiled
from references.devices import junction, soft
from references.orbit import Array, Orbit, Slope, settle, transient

D, E, X, Y, G, IC, IL, IW = range(8)
PIN = np.eye(8)[IL]  # phase: coil current rises through zero


@dataclass(frozen=True)
class Values:
    """Part values, SI."""

    supply: float = 20.0
    bias: float = 4.0
    choke: float = 40e-6
    choke_resistance: float = 0.1
    shunt: float = 3.0e-9
    series: float = 18e-9
    coil: float = 2.2e-6
    coil_resistance: float = 0.2
    coupling: float = 0.6
    loop: float = 120e-9
    loop_resistance: float = 0.4
    foot: float = 9e-9
    feedback: float = 4.0e-9  # x-y
    tap: float = 1.2e-9  # y-gnd
    delay: float = 16.0  # y-g
    gate_capacitor: float = 3.0e-9
    bias_resistor: float = 1.2e3
    tap_resistor: float = 82e3  # y-gnd
    threshold: float = 3.1
    gain: float = 7.0
    knee: float = 0.12
    cgd0: float = 300e-12
    cds0: float = 1.4e-9
    body_voltage: float = 0.75
    body_conductance: float = 50.0
    body_knee: float = 0.05
    potential: float = 0.8
    leak: float = 1e-8


@compiled
def _slope(x: Array, w: Array) -> Array:
    """dx/dt of the eight states; `w` is the flat tuple of `Values`."""
    vdd, vb, choke, r_choke, shunt, series, coil, r_coil, k_couple = w[:9]
    loop, r_loop, foot, feedback, tap, delay, c_gate, r_bias, r_tap = w[9:18]
    vt, gain, knee, cgd0, cds0, v_body, g_body, s_body, phi, leak = w[18:28]
    d, e, f, y, g = x[0], x[1], x[2], x[3], x[4]
    cgd = junction(cgd0, d - g, phi, 0.5)
    cap = np.zeros((5, 5))
    cap[0, 0] = shunt + junction(cds0, d, phi, 0.5) + series + cgd
    cap[0, 1] = cap[1, 0] = -series
    cap[0, 4] = cap[4, 0] = -cgd
    cap[1, 1] = series
    cap[2, 2] = foot + feedback
    cap[2, 3] = cap[3, 2] = -feedback
    cap[3, 3] = feedback + tap
    cap[4, 4] = c_gate + cgd
    channel = 0.5 * gain * (soft(g - vt, knee) ** 2 - soft(g - d - vt, knee) ** 2)
    inflow = -leak * x[:5]
    inflow[0] += x[5] - channel + g_body * soft(-d - v_body, s_body)
    inflow[1] -= x[6]
    inflow[2] += x[6]
    inflow[3] -= (y - g) / delay + y / r_tap
    inflow[4] += (y - g) / delay + (vb - g) / r_bias
    rate = np.empty(8)
    rate[:5] = np.linalg.solve(cap, inflow)
    rate[5] = (vdd - r_choke * x[5] - d) / choke
    mutual = k_couple * np.sqrt(coil * loop)
    u_coil = e - f - r_coil * x[6]
    u_loop = -r_loop * x[7]
    determinant = coil * loop - mutual * mutual
    rate[6] = (loop * u_coil - mutual * u_loop) / determinant
    rate[7] = (coil * u_loop - mutual * u_coil) / determinant
    return rate


def slope_of(values: Values) -> Slope:
    """Right-hand side f(t, x) of one set of part values."""
    flat = np.array(astuple(values))

    def slope(_t: float, x: Array) -> Array:
        return np.asarray(_slope(x, flat))

    return slope


def settled_orbit(values: Values, duration: float = 60e-6) -> Orbit:
    """Settled orbit from power-on with a charged gate; Newton on the period map at the end."""
    slope = slope_of(values)
    start = np.array([values.supply, values.supply, 0.0, 0.0, values.bias, 0.5, 1.0, 0.0])
    x, period = transient(slope, start, duration, PIN)
    return settle(slope, x, period, PIN, rtol=1e-10)
