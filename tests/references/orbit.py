"""Periodic orbits of small systems of ordinary differential equations, by scipy alone.

The period map is evaluated by a general adaptive integrator at tight tolerance and its
fixed point is found by Newton's method with central differences.  Slow, plain, and
sharing nothing with the batched solver it is there to check.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy.integrate import solve_ivp

Array = NDArray[np.float64]
Method = Literal["LSODA", "DOP853", "Radau", "BDF"]
Slope = Callable[[float, Array], Array]


@dataclass(frozen=True)
class Orbit:
    """One settled cycle.

    Attributes
    ----------
    period : seconds.
    times : (m,) equally spaced over one period, end point left out.
    states : (m, n) at those times.
    multipliers : (n,) complex Floquet multipliers, largest first; one of them is 1.
    residual : largest |x(T) - x(0)| in units of the peak of each state.
    """

    period: float
    times: Array
    states: Array
    multipliers: NDArray[np.complex128]
    residual: float

    @property
    def frequency(self) -> float:
        """Hz."""
        return 1.0 / self.period


def peak(wave: Array) -> float:
    """Largest value of a periodic wave, by a parabola through its highest samples."""
    k = int(np.argmax(wave))
    left, top, right = wave[k - 1], wave[k], wave[(k + 1) % len(wave)]
    bend = left - 2.0 * top + right
    return float(top if bend == 0 else top - (right - left) ** 2 / (8.0 * bend))


def trough(wave: Array) -> float:
    """Smallest value of a periodic wave."""
    return -peak(-wave)


def rms(wave: Array) -> float:
    """Root mean square; equal steps over a period converge faster than any power."""
    return float(np.sqrt(np.mean(wave**2)))


def integrate(slope: Slope, start: Array, duration: float, *, method: Method, rtol: float) -> Array:
    """State after `duration`, shape (n,)."""
    answer = solve_ivp(slope, (0.0, duration), start, method=method, rtol=rtol, atol=rtol * 1e-2)
    if not answer.success:
        raise ArithmeticError(f"integrator stopped: {answer.message}")
    return np.asarray(answer.y[:, -1])


def transient(
    slope: Slope,
    start: Array,
    duration: float,
    pin: Array,
    *,
    method: Method = "LSODA",
    rtol: float = 1e-6,
) -> tuple[Array, float]:
    """Run on from `start`; last state with pin . x rising through zero, and the period."""

    def crossing(_t: float, x: Array) -> float:
        return float(pin @ x)

    crossing.direction = 1.0  # type: ignore[attr-defined]  # scipy reads it from the function
    answer = solve_ivp(
        slope, (0.0, duration), start, method=method, rtol=rtol, atol=rtol * 1e-2, events=crossing
    )
    times, states = answer.t_events, answer.y_events
    if times is None or states is None or len(times[0]) < 3:
        raise ArithmeticError(f"no oscillation to follow: {answer.message}")
    return np.asarray(states[0][-1]), float(np.diff(times[0])[-1])


def settle(
    slope: Slope,
    start: Array,
    period: float,
    pin: Array,
    *,
    method: Method = "LSODA",
    rtol: float = 1e-12,
    samples: int = 4096,
    driven: bool = False,
) -> Orbit:
    """Newton on the period map: x(T; x0) = x0 with pin . x0 = 0 (T is known if `driven`).

    Parameters
    ----------
    start, period : a guess near the orbit, for instance from `transient`.
    pin : (n,) weights of the phase condition; unused when `driven`.
    """
    x, scale = np.array(start, dtype=float), np.maximum(np.abs(start), 1.0)
    n, last, monodromy = len(x), np.inf, np.empty((0, 0))
    for _ in range(25):
        ahead = integrate(slope, x, period, method=method, rtol=rtol)
        if last > 1e-2:  # near the orbit the matrix of the step before is good enough
            monodromy = _monodromy(slope, x, period, scale, method=method, rtol=rtol)
        gap = ahead - x
        if driven:
            move, stretch = np.linalg.solve(monodromy - np.eye(n), -gap), 0.0
        else:
            bordered = np.zeros((n + 1, n + 1))
            bordered[:n, :n] = monodromy - np.eye(n)
            bordered[:n, n] = slope(period, ahead) * period
            bordered[n, :n] = pin
            answer = np.linalg.solve(bordered, -np.append(gap, pin @ x))
            move, stretch = answer[:n], float(answer[n])
        x, period = x + move, period * (1.0 + stretch)
        last = float(np.max(np.abs(move) / scale))
        if last < 1e-7:
            break
    else:
        raise ArithmeticError("Newton on the period map did not settle")
    monodromy = _monodromy(slope, x, period, scale, method=method, rtol=rtol)
    return _sampled(slope, x, period, monodromy, method=method, rtol=rtol, samples=samples)


def _monodromy(
    slope: Slope, x: Array, period: float, scale: Array, *, method: Method, rtol: float
) -> Array:
    matrix = np.empty((len(x), len(x)))
    for j, size in enumerate(1e-4 * scale):
        step = np.zeros(len(x))
        step[j] = size
        up = integrate(slope, x + step, period, method=method, rtol=rtol)
        down = integrate(slope, x - step, period, method=method, rtol=rtol)
        matrix[:, j] = (up - down) / (2.0 * size)
    return matrix


def _sampled(
    slope: Slope,
    start: Array,
    period: float,
    monodromy: Array,
    *,
    method: Method,
    rtol: float,
    samples: int,
) -> Orbit:
    times = np.arange(samples) * period / samples
    answer = solve_ivp(
        slope,
        (0.0, period),
        start,
        method=method,
        rtol=rtol,
        atol=rtol * 1e-2,
        t_eval=np.append(times, period),
    )
    states = answer.y.T
    size = np.maximum(np.max(np.abs(states), axis=0), 1e-9)
    multipliers = np.linalg.eigvals(monodromy).astype(np.complex128)
    return Orbit(
        period=period,
        times=times,
        states=states[:-1],
        multipliers=multipliers[np.argsort(-np.abs(multipliers))],
        residual=float(np.max(np.abs(states[-1] - states[0]) / size)),
    )
