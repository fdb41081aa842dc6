"""Extremes, means and rms values of periodic waves on an even grid, (m, N) -> (N,).

Means and rms values are plain averages over the grid: for a smooth periodic function that is the
most accurate rule there is (Trefethen, Weideman, SIAM Review 56 (2014) 385-458).
"""

from __future__ import annotations

import numpy as np

from tolsim.circuit.devices import Floats, Ints

LARGEST_LIFT = 0.01  # of peak-to-peak; a sine of 32 points per period asks for a quarter of it


def highest(wave: Floats) -> Floats:
    """Largest value of a periodic wave, by a parabola through the three points around it."""
    return _vertex(wave, np.argmax(wave, axis=0), np.ptp(wave, axis=0), 1.0)


def extremes(wave: Floats) -> tuple[Floats, Floats]:
    """Largest and smallest value of a periodic wave."""
    top, bottom, units = np.argmax(wave, axis=0), np.argmin(wave, axis=0), np.arange(wave.shape[1])
    swing = wave[top, units] - wave[bottom, units]
    return _vertex(wave, top, swing, 1.0), -_vertex(wave, bottom, swing, -1.0)


def largest(wave: Floats) -> Floats:
    """Largest magnitude of a periodic wave."""
    high, low = extremes(wave)
    return np.maximum(high, -low)


def _vertex(wave: Floats, top: Ints, swing: Floats, sign: float) -> Floats:
    """Largest value of `sign` times the wave, whose largest sample stands at `top`."""
    units = np.arange(wave.shape[1])
    middle = sign * wave[top, units]
    before, after = sign * wave[top - 1, units], sign * wave[(top + 1) % len(wave), units]
    bend = before - 2 * middle + after
    slope = 0.5 * (after - before)
    lift = np.where(bend < 0, -(slope**2) / np.where(bend < 0, 2 * bend, 1.0), 0.0)
    # a vertex lies at most half a step from the largest sample; beside an edge that rises within
    # one step the parabola knows nothing, and what it may add is bounded
    bound = np.minimum(0.5 * np.abs(slope), LARGEST_LIFT * swing)
    return np.asarray(middle + np.minimum(lift, bound))


def rms(wave: Floats) -> Floats:
    """Root of the mean square over the period, (N,)."""
    return np.sqrt(np.mean(wave**2, axis=0))


def mean(wave: Floats) -> Floats:
    """Mean over the period, (N,)."""
    return np.mean(wave, axis=0)
