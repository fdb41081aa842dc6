"""Step after step along a circuit: the one loop that periods and transients share.

Newton at the ports starts from quadratic extrapolation through the last three points.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.devices import Floats
from tolsim.circuit.stepper import GAMMA, A, B, Point, Stepper


def _extrapolation(known: tuple[float, float, float], wanted: float) -> NDArray[np.float64]:
    """Lagrange weights of a quadratic through three times, at a fourth."""
    weights = np.ones(3)
    for i, here in enumerate(known):
        for j, other in enumerate(known):
            if i != j:
                weights[i] *= (wanted - other) / (here - other)
    return weights


# times in steps: start of the last step, its inner stage, now; then the same one stage on
STAGE_WEIGHTS = _extrapolation((-1.0, GAMMA - 1.0, 0.0), GAMMA)
END_WEIGHTS = _extrapolation((GAMMA - 1.0, 0.0, GAMMA), 1.0)


def walk(
    stepper: Stepper, start: Point, count: int, phase_step: float
) -> Iterator[tuple[Point, Point, Point]]:
    """Take `count` TR-BDF2 steps; give start, inner stage and end of each.

    Parameters
    ----------
    phase_step : float
        Drive periods per step (without effect where there is no drive).
    """
    point = start
    earlier = middle = point.port.v
    for k in range(count):
        phase, now = k * phase_step, point.port.v
        guess = now if k == 0 else _blend(STAGE_WEIGHTS, earlier, middle, now)
        inner = stepper.stage(stepper.trapezoid_part(point, phase, GAMMA * phase_step), guess)
        if k == 0:
            guess = now + (inner.port.v - now) / GAMMA
        else:
            guess = _blend(END_WEIGHTS, middle, now, inner.port.v)
        x_lin = A * inner.y - B * point.y + stepper.push(phase + phase_step)
        end = stepper.stage(x_lin, guess)
        yield point, inner, end
        earlier, middle, point = now, inner.port.v, end


def _blend(weights: NDArray[np.float64], a: Floats, b: Floats, c: Floats) -> Floats:
    return weights[0] * a + weights[1] * b + weights[2] * c
