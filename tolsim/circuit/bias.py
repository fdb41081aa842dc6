"""DC operating point of N units: F x + P f(D x + v0) = b.

Damped Newton from zero; units that do not settle are led in by implicit pseudo-transient steps,
which follow the circuit's own charges and so cannot be trapped by a sharp device
(Kelley, Keyes, "Convergence analysis of pseudo-transient continuation", SIAM J. Numer. Anal. 35
(1998) 508-523).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.devices import Floats
from tolsim.circuit.network import Network
from tolsim.circuit.stepper import apply

NEWTON_ROUNDS = 60
LARGEST_MOVE = 2.0  # V or A, per Newton step
TOLERANCE = 1e-9  # relative to 1 V + |x|
PSEUDO_STEPS = 80
PSEUDO_ROUNDS = 12  # Newton rounds per pseudo-transient step
PSEUDO_TOLERANCE = 1e-7  # V or A, last move of a pseudo-transient step


@dataclass(frozen=True)
class Bias:
    """Operating points."""

    x: Floats  # (N, n)
    v: Floats  # (N, p)
    G: Floats  # (N, p, p) df/dv
    C: Floats  # (N, p, p) dq/dv
    settled: NDArray[np.bool_]  # (N,)


def bias_point(network: Network, guess: Floats | None = None) -> Bias:
    """Find the operating point of every unit.

    Parameters
    ----------
    guess : (N, n), optional
        Where to begin; zero if not given.
    """
    x = np.zeros((network.units, network.states)) if guess is None else guess.copy()
    x, settled = _newton(network, x)
    if not settled.all():
        rest = np.flatnonzero(~settled)
        led = _pseudo_transient(network.take(rest))
        x[rest], settled[rest] = _newton(network.take(rest), led)
    v = network.port_voltages(x)
    _, _, g, c = network.devices.evaluate(v)
    return Bias(x, v, g, c, settled)


def _newton(network: Network, x: Floats) -> tuple[Floats, NDArray[np.bool_]]:
    """Newton with a bound on each move; settled units are left alone."""
    settled = np.zeros(network.units, dtype=bool)
    mean_source = network.mean_source()
    for _ in range(NEWTON_ROUNDS):
        f, _, g, _ = network.devices.evaluate(network.port_voltages(x))
        residual = apply(network.F, x) + f @ network.D - mean_source
        jacobian = network.F + network.D.T @ g @ network.D
        move = -np.linalg.solve(jacobian, residual[:, :, None])[:, :, 0]
        ports = np.abs(move @ network.D.T).max(axis=1, initial=0.0)
        move *= np.minimum(1.0, LARGEST_MOVE / np.maximum(ports, 1e-300))[:, None]
        move[settled] = 0.0
        x = x + move
        settled |= (np.abs(move) <= TOLERANCE * (1.0 + np.abs(x))).all(axis=1)
        if settled.all():
            break
    return x, settled


def _pseudo_transient(network: Network) -> Floats:
    """Implicit Euler from rest with steps growing from 1 ns to seconds."""
    x = np.zeros((network.units, network.states))
    mean_source = network.mean_source()
    for step in np.geomspace(1e-9, 10.0, PSEUDO_STEPS):
        _, q0, _, _ = network.devices.evaluate(network.port_voltages(x))
        start = x
        for _ in range(PSEUDO_ROUNDS):
            f, q, g, c = network.devices.evaluate(network.port_voltages(x))
            residual = (
                apply(network.E, x - start) / step
                + ((q - q0) / step + f) @ network.D
                + apply(network.F, x)
                - mean_source
            )
            jacobian = network.E / step + network.F + network.D.T @ (g + c / step) @ network.D
            move = -np.linalg.solve(jacobian, residual[:, :, None])[:, :, 0]
            ports = np.abs(move @ network.D.T).max(axis=1, initial=0.0)
            x = x + move * np.minimum(1.0, LARGEST_MOVE / np.maximum(ports, 1e-300))[:, None]
            if np.abs(move).max() < PSEUDO_TOLERANCE:
                break
    return x
