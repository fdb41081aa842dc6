"""March N units through time in equal steps."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from tolsim.circuit.devices import Floats
from tolsim.circuit.network import Network
from tolsim.circuit.stepper import Stepper
from tolsim.circuit.walk import walk

Levels = Callable[[Floats], Floats]  # times (N,), s -> levels of the live rails, (N, R)


def march(
    network: Network,
    x0: Floats,
    step: Floats,
    count: int,
    phase_step: float = 0.0,
    levels: Levels | None = None,
) -> Floats:
    """States (count + 1, N, n) at the ends of `count` TR-BDF2 steps.

    Parameters
    ----------
    x0 : (N, n)
    step : (N,), s
    phase_step : float
        Drive periods per step (0 without a drive).
    levels : callable, optional
        Levels of the rails of a network with live rails; they stay at 0 without it.
    """
    if levels is None:
        stepper = Stepper(network, step)
    else:
        phase_step = phase_step or 1.0  # without a drive a phase counts steps
        stepper = _RisingStepper(network, step, phase_step, levels)
    point = stepper.start(x0)
    samples = np.empty((count + 1, *x0.shape))
    samples[0] = x0
    for k, (_, _, end) in enumerate(walk(stepper, point, count, phase_step)):
        samples[k + 1] = end.x
    return samples


class _RisingStepper(Stepper):
    """Steps along circuits whose rails move."""

    def __init__(self, network: Network, step: Floats, phase_step: float, levels: Levels) -> None:
        super().__init__(network, step)
        self._phase_step = phase_step
        self._levels = levels

    def push(self, phase: float) -> Floats:
        """c S^-1 b at a phase of the drive, or after that many steps where there is none."""
        source = self.network.source_at(phase)
        if self.network.rail_matrix is not None:
            levels = self._levels(phase / self._phase_step * self.step)
            source = source + np.einsum("unr,ur->un", self.network.rail_matrix, levels)
        return self.matrices.push(source)
