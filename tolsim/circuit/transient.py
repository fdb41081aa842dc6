"""March N units through time in equal steps."""

from __future__ import annotations

import numpy as np

from tolsim.circuit.cycle import END_WEIGHTS, STAGE_WEIGHTS
from tolsim.circuit.devices import Floats
from tolsim.circuit.network import Network
from tolsim.circuit.stepper import GAMMA, A, B, Stepper


def march(
    network: Network, x0: Floats, step: Floats, count: int, phase_step: float = 0.0
) -> Floats:
    """States (count + 1, N, n) at the ends of `count` TR-BDF2 steps.

    Parameters
    ----------
    x0 : (N, n)
    step : (N,), s
    phase_step : float
        Drive periods per step (0 without a drive).
    """
    stepper = Stepper(network, step)
    point = stepper.start(x0)
    samples = np.empty((count + 1, *x0.shape))
    samples[0] = x0
    earlier = middle = point.port.v
    for k in range(count):
        phase = k * phase_step
        now = point.port.v
        guess = (
            now
            if k == 0
            else STAGE_WEIGHTS[0] * earlier + STAGE_WEIGHTS[1] * middle + STAGE_WEIGHTS[2] * now
        )
        inner = stepper.stage(stepper.trapezoid_part(point, phase, GAMMA * phase_step), guess)
        if k == 0:
            guess = now + (inner.port.v - now) / GAMMA
        else:
            guess = END_WEIGHTS[0] * middle + END_WEIGHTS[1] * now + END_WEIGHTS[2] * inner.port.v
        x_lin = A * inner.y - B * point.y + stepper.push(phase + phase_step)
        earlier, middle, point = now, inner.port.v, stepper.stage(x_lin, guess)
        samples[k + 1] = point.x
    return samples
