"""One period of drive or oscillation in m equal TR-BDF2 steps, with exact discrete derivatives.

The period T of each unit is its own: the step is T/m, so c = gamma T/(2m) depends on T and the
derivative d/dT follows from differentiating the stage equations:

    trapezoid   S dxg = ... + (y_g - y_0)/T dT
    BDF2        S dx1 = ... - (a y_g - b y_0 - y_1)/T dT

(the brackets are S^-1 times the stage's own right-hand terms, see `stepper`).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.devices import Floats
from tolsim.circuit.network import Network
from tolsim.circuit.stepper import A, B, Point, Sensitivity, Stepper
from tolsim.circuit.walk import walk


@dataclass(frozen=True)
class Cycle:
    """One period of N units."""

    samples: Floats  # (m + 1, N, n) states at the ends of the steps
    monodromy: Floats | None  # (N, n, n) d x(T) / d x0
    by_period: Floats | None  # (N, n) d x(T) / dT
    settled: NDArray[np.bool_]  # (N,) every stage solved


def run_cycle(
    network: Network, x0: Floats, period: Floats, steps: int, *, derivatives: bool
) -> Cycle:
    """Integrate one period.

    Parameters
    ----------
    x0 : (N, n)
        States at the start.
    period : (N,), s
    steps : int
        Steps per period, m.
    derivatives : bool
        Whether to carry d/dx0 and d/dT along.
    """
    stepper = Stepper(network, period / steps)
    autonomous = network.drive_matrix is None
    point = stepper.start(x0)
    slope = stepper.start_sensitivity(point, with_period=autonomous) if derivatives else None
    samples = np.empty((steps + 1, *x0.shape))
    samples[0] = x0
    settled = np.ones(len(x0), dtype=bool)
    known = period if autonomous else None
    for k, (here, inner, end) in enumerate(walk(stepper, point, steps, 1 / steps)):
        if slope is not None:
            slope = _step_slope(stepper, slope, here, inner, end, known)
        settled &= inner.settled & end.settled
        samples[k + 1] = end.x
    if slope is None:
        return Cycle(samples, None, None, settled)
    n = x0.shape[1]
    by_period = slope.dx[:, :, n] if autonomous else None
    return Cycle(samples, slope.dx[:, :, :n], by_period, settled)


def _step_slope(
    stepper: Stepper,
    slope: Sensitivity,
    point: Point,
    inner: Point,
    end: Point,
    period: Floats | None,
) -> Sensitivity:
    """Carry the derivatives over one step."""
    dx_lin = stepper.trapezoid_sensitivity(slope)
    if period is not None:
        dx_lin[:, :, -1] += (inner.y - point.y) / period[:, None]
    inner_slope = stepper.stage_sensitivity(dx_lin, inner)
    dx_lin = A * inner_slope.dy - B * slope.dy
    if period is not None:
        dx_lin[:, :, -1] -= (A * inner.y - B * point.y - end.y) / period[:, None]
    return stepper.stage_sensitivity(dx_lin, end)
