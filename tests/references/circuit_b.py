"""Reference circuit B: push-pull parallel tank, gates pulled down by diodes, written by hand.

Not a demo but a check of diode, clamp and coupled-load equations.  Nets: vdd, vg (ideal
rails), drains a, b, gates ga, gb.  State x = (a, b, ga, gb, ia, ib, iL, iw): net voltages,
choke currents vdd to a and b, coil current a to b, current of the coupled loop.

The gate clamp (two ways) conducts in every cycle, the diode from each gate to the opposite
drain carries the pull-up current while that drain is low.
"""

from __future__ import annotations

from dataclasses import astuple, dataclass

import numpy as np

from references.compiled import compiled
from references.devices import junction, soft
from references.orbit import Array, Orbit, Slope, settle, transient

A, B, GA, GB, IA, IB, IL, IW = range(8)
PIN = np.eye(8)[A] - np.eye(8)[B]  # phase: tank voltage rises through zero


@dataclass(frozen=True)
class Values:
    """Part values, SI, the same on both sides."""

    supply: float = 28.0
    gate_rail: float = 15.0
    choke: float = 90e-6
    choke_resistance: float = 50e-3
    tank: float = 0.7e-6
    coil: float = 1.1e-6
    coil_resistance: float = 12e-3
    coupling: float = 0.35
    loop: float = 0.3e-6  # inductance of the coupled loop
    loop_resistance: float = 0.15
    pull_up: float = 180.0
    gate_capacitor: float = 2.5e-9  # constant part of the gate capacitance
    threshold: float = 3.2
    gain: float = 45.0
    knee: float = 0.12
    cgd0: float = 1.2e-9
    cds0: float = 3.0e-9
    diode_voltage: float = 0.75
    diode_conductance: float = 6.0
    diode_knee: float = 0.05
    diode_capacitance: float = 120e-12
    clamp_voltage: float = 9.5
    clamp_conductance: float = 2.0
    clamp_knee: float = 0.2
    body_voltage: float = 0.75
    body_conductance: float = 50.0
    body_knee: float = 0.05
    potential: float = 0.8  # of all junctions, grading one half
    leak: float = 1e-8


@compiled
def _slope(x: Array, w: Array) -> Array:
    """dx/dt of the eight states; `w` is the flat tuple of `Values`."""
    vdd, vg, choke, r_choke, tank, coil, r_coil, k_couple = w[:8]
    loop, r_loop, r_up, c_gate, vt, gain, knee, cgd0, cds0 = w[8:17]
    v_diode, g_diode, s_diode, c_diode, v_clamp, g_clamp, s_clamp = w[17:24]
    v_body, g_body, s_body, phi, leak = w[24:29]
    cap = np.zeros((4, 4))
    inflow = np.zeros(4)
    rate = np.empty(8)
    for side in range(2):
        drain, gate, other = side, 2 + side, 1 - side
        vds, vgs, across = x[drain], x[gate], x[gate] - x[other]
        channel = 0.5 * gain * (soft(vgs - vt, knee) ** 2 - soft(vgs - vds - vt, knee) ** 2)
        body = g_body * soft(-vds - v_body, s_body)
        diode = g_diode * soft(across - v_diode, s_diode)
        clamp = g_clamp * (soft(vgs - v_clamp, s_clamp) - soft(-vgs - v_clamp, s_clamp))
        coil_current = x[6] if side == 0 else -x[6]
        inflow[drain] += x[4 + side] - channel + body - coil_current - leak * vds
        inflow[gate] += (vg - vgs) / r_up - diode - clamp - leak * vgs
        inflow[other] += diode
        cgd = junction(cgd0, vds - vgs, phi, 0.5)
        cd = junction(c_diode, -across, phi, 0.5)
        cap[drain, drain] += junction(cds0, vds, phi, 0.5) + cgd + tank
        cap[drain, other] -= tank
        cap[drain, gate] -= cgd
        cap[gate, drain] -= cgd
        cap[gate, gate] += c_gate + cgd + cd
        cap[gate, other] -= cd
        cap[other, gate] -= cd
        cap[other, other] += cd
        rate[4 + side] = (vdd - r_choke * x[4 + side] - vds) / choke
    rate[:4] = np.linalg.solve(cap, inflow)
    mutual = k_couple * np.sqrt(coil * loop)
    u_coil = x[0] - x[1] - r_coil * x[6]
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


def settled_orbit(values: Values, cycles: int = 80) -> Orbit:
    """Settled orbit from a start with side a high; Newton on the period map at the end."""
    slope = slope_of(values)
    start = np.array([values.supply, 0.0, 0.5, 0.8 * values.gate_rail, 3.0, 3.0, 0.0, 0.0])
    ringing = 2.0 * np.pi * np.sqrt(values.coil * values.tank)
    x, period = transient(slope, start, cycles * ringing, PIN)
    return settle(slope, x, period, PIN, rtol=1e-10)
