"""Floquet multipliers of known orbits: the derivatives of a coarse TR-BDF2 pass along each.

The orbit is known, so nothing is solved for: port voltages at the stage times come from the
Fourier coefficients, and the devices are linearised there.  With the matrices of `stepper`,
W = dw/dv, C = dq/dv at a point, a change u of a stage's linear part x_lin moves

    dx + H dw = u,     dy = Y u,     Y = G + (H C - G H W) (I + K W)^-1 D

so that both stages of a step, from Y0 over Yg, come to one product in u:

    u_g = (2 Y0 - I) u_0,     u_1 = A Yg u_g - B Y0 u_0.

Few steps do for the slow multipliers, which decide stability; the phase multiplier comes out wrong
(1.25 at 16 steps, measured) and is taken out beforehand (`floquet`).  Units whose largest
multiplier comes near 1 are looked at again with finer steps, until it is clear of 1.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.bulk.grid import sampled
from tolsim.circuit.charge import islands
from tolsim.circuit.devices import Floats
from tolsim.circuit.floquet import largest_beside_charge, sorted_multipliers
from tolsim.circuit.network import Network
from tolsim.circuit.stepper import GAMMA, A, B, StepMatrices, apply

STEPS = (16, 32, 128)  # per period: coarse for all, finer for the doubtful
DOUBTFUL = 0.985  # from this modulus on finer steps decide


def multipliers(
    network: Network, coefficients: Floats, period: Floats, scale: Floats
) -> NDArray[np.complex128]:
    """Multipliers (N, n) of N orbits, largest first, the phase one taken out.

    Parameters
    ----------
    coefficients : (n, K, N)
        Fourier coefficients of the states over their scales.
    """
    found = np.empty((network.units, network.states), dtype=complex)
    before = np.full(network.units, np.inf)
    doubtful = np.arange(network.units)
    for steps in STEPS:
        found[doubtful] = _pass(
            network.take(doubtful), coefficients[:, :, doubtful], period[doubtful], scale, steps
        )
        now = largest_beside_charge(found[doubtful])
        # halving the steps quarters the error: what the last halving moved is more than is left
        unsure = (now > DOUBTFUL) & (now + np.abs(now - before[doubtful]) > 1.0)
        before[doubtful] = now
        doubtful = doubtful[unsure]
        if not doubtful.size:
            break
    return found


def _pass(
    network: Network, coefficients: Floats, period: Floats, scale: Floats, steps: int
) -> NDArray[np.complex128]:
    matrices = StepMatrices.of(network, period / steps)
    phases = (np.arange(steps)[:, None] + np.array([GAMMA, 1.0])).ravel() / steps
    basis = _basis(coefficients.shape[1] // 2, np.concatenate([[0.0], phases]))
    waves = sampled(coefficients, basis).transpose(1, 2, 0) * scale
    reach = _reach(network, matrices, waves[: 2 * steps])
    identity = np.eye(network.states)
    product = np.broadcast_to(identity, reach.shape[1:])
    for k in range(steps):
        here, inner = reach[2 * k], reach[2 * k + 1]
        product = (A * (inner @ (2.0 * here - identity)) - B * here) @ product
    driven = network.drive_matrix is not None
    flow = None if driven else _flow(network, matrices, waves[0], waves[-1])
    # an island's charge is the row (E + P C P') of its nets; in u it reads E + c F, a constant
    charges = islands(network) @ (network.E + matrices.c[:, None, None] * network.F)
    return sorted_multipliers(product, flow, scale, charges)


def _reach(network: Network, matrices: StepMatrices, x: Floats) -> Floats:
    """Y (s, N, n, n) at states x (s, N, n) of s instants, all devices evaluated at once."""
    instants, units, _ = x.shape
    devices = network.devices.take(np.tile(np.arange(units), instants))
    v = network.port_voltages(x).reshape(instants * units, -1)
    _, _, conductance, capacitance = devices.evaluate(v)
    shape = (instants, units, *conductance.shape[1:])
    C = capacitance.reshape(shape)
    W = C + matrices.c[:, None, None] * conductance.reshape(shape)
    within = np.linalg.inv(np.eye(shape[-1]) + matrices.K @ W)
    bent = matrices.H @ C - (matrices.G @ matrices.H) @ W
    return np.asarray(matrices.G + (bent @ within) @ network.D)


def _flow(network: Network, matrices: StepMatrices, x: Floats, slope: Floats) -> Floats:
    """Direction of the orbit in the coordinates u: dx + H W D dx, (N, n)."""
    _, _, conductance, capacitance = network.devices.evaluate(network.port_voltages(x))
    W = capacitance + matrices.c[:, None, None] * conductance
    return slope + apply(matrices.H @ W, slope @ network.D.T)


def _basis(harmonics: int, phases: Floats) -> Floats:
    """Rows that give values at the phases, and a last one for the slope at phase 0."""
    orders = np.arange(1.0, harmonics + 1)
    angle = 2 * np.pi * phases[:, None] * orders
    values = np.concatenate([np.ones((len(phases), 1)), np.cos(angle), np.sin(angle)], axis=1)
    slope = np.concatenate([np.zeros(harmonics + 1), orders])
    return np.concatenate([values, slope[None]])
