"""March N units through time in equal steps."""

from __future__ import annotations

import numpy as np

from tolsim.circuit.devices import Floats
from tolsim.circuit.network import Network
from tolsim.circuit.stepper import Stepper
from tolsim.circuit.walk import walk


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
    for k, (_, _, end) in enumerate(walk(stepper, point, count, phase_step)):
        samples[k + 1] = end.x
    return samples
