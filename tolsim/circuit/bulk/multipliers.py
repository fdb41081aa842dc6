"""Floquet multipliers of known orbits: the derivatives of a coarse TR-BDF2 pass along each.

The orbit is known, so nothing is solved for: port voltages at the stage times come from the
Fourier coefficients, the devices are linearised there, and the columns d/dx0 are carried through
the stages of `stepper`.  Few steps do for the slow multipliers, which decide stability; the phase
multiplier comes out wrong (1.25 at 16 steps, measured) and is taken out beforehand (`floquet`).
Units whose largest multiplier comes near 1 are looked at again with finer steps.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.devices import Floats
from tolsim.circuit.floquet import deflated_multipliers, largest_beside_charge
from tolsim.circuit.network import Network
from tolsim.circuit.stepper import GAMMA, A, B, Point, Stepper, measure

COARSE_STEPS = 16
FINE_STEPS = 64
DOUBTFUL = 0.985  # from here on the fine steps decide


def multipliers(
    network: Network, coefficients: Floats, period: Floats, samples: Floats, scale: Floats
) -> NDArray[np.complex128]:
    """Multipliers (N, n) of N orbits, largest first, the phase one taken out.

    Parameters
    ----------
    coefficients : (K, N, n)
        Fourier coefficients of the states.
    samples : (m + 1, N, n)
        The same orbits on an even grid.
    """
    driven = network.drive_matrix is not None
    found = _pass(network, coefficients, period, samples, scale, driven, COARSE_STEPS)
    doubtful = np.flatnonzero(largest_beside_charge(found) > DOUBTFUL)
    if doubtful.size:
        found[doubtful] = _pass(
            network.take(doubtful),
            coefficients[:, doubtful],
            period[doubtful],
            samples[:, doubtful],
            scale,
            driven,
            FINE_STEPS,
        )
    return found


def _pass(
    network: Network,
    coefficients: Floats,
    period: Floats,
    samples: Floats,
    scale: Floats,
    driven: bool,
    steps: int,
) -> NDArray[np.complex128]:
    stepper = Stepper(network, period / steps)
    phases = (np.arange(steps)[:, None] + np.array([GAMMA, 1.0])).ravel() / steps
    waves = _values(coefficients, np.concatenate([[0.0], phases]))
    start = stepper.start(waves[0])
    slope = stepper.start_sensitivity(start, with_period=False)
    for k in range(steps):
        inner = _linearised(stepper, waves[2 * k + 1])
        end = _linearised(stepper, waves[2 * k + 2])
        inner_slope = stepper.stage_sensitivity(stepper.trapezoid_sensitivity(slope), inner)
        slope = stepper.stage_sensitivity(A * inner_slope.dy - B * slope.dy, end)
    return deflated_multipliers(slope.dx, samples, scale, driven)


def _values(coefficients: Floats, phases: Floats) -> Floats:
    """States (m, N, n) at given phases."""
    harmonics = len(coefficients) // 2
    angle = 2 * np.pi * phases[:, None] * np.arange(1, harmonics + 1)
    basis = np.concatenate([np.ones((len(phases), 1)), np.cos(angle), np.sin(angle)], axis=1)
    _, units, n = coefficients.shape
    return (basis @ coefficients.reshape(len(coefficients), -1)).reshape(-1, units, n)


def _linearised(stepper: Stepper, x: Floats) -> Point:
    """A point of the orbit with the port matrix I + K W of a stage that ends there."""
    matrices = stepper.matrices
    port = measure(stepper.network.devices, matrices.c, stepper.network.port_voltages(x))
    port = replace(port, matrix=np.eye(port.v.shape[1]) + matrices.K @ port.W)
    return Point(x, x, port)
