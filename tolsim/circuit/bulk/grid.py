"""Real Fourier basis on an even grid: synthesis, analysis, differentiation.

A period is written with H harmonics of the phase theta = w t in [0, 2 pi),

    x(theta) = c_0 + sum_k c_k cos(k theta) + s_k sin(k theta),   K = 2 H + 1 coefficients,

in the order (c_0, c_1 ... c_H, s_1 ... s_H).  Synthesis G (m, K) gives the values at m even points,
analysis A (K, m) the coefficients of the trigonometric interpolant; A G = 1 for m >= 2 H + 1.
Devices make products of waveforms, whose high harmonics fold back onto low ones unless the grid
has room for them: with m = 2 H frequencies came out 6e-4 wrong (measured), so m = 4 H is the rule.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from tolsim.circuit.devices import Floats

POINTS_PER_HARMONIC = 4
WIDTH = 64  # units sampled in one product


def synthesis(harmonics: int, points: int) -> Floats:
    """G (points, K): values of every basis function at `points` even phases, the first at 0."""
    angle = 2 * np.pi * np.arange(points)[:, None] * np.arange(1, harmonics + 1) / points
    return np.concatenate([np.ones((points, 1)), np.cos(angle), np.sin(angle)], axis=1)


def analyse(samples: Floats, harmonics: int) -> Floats:
    """Coefficients (K, ...) of one period of even samples (m, ...), end point left out.

    Harmonics beyond what the samples can carry are zero.
    """
    points = len(samples)
    spectrum = np.fft.rfft(samples, axis=0) / points
    kept = min(harmonics, (points - 1) // 2)
    coefficients = np.zeros((2 * harmonics + 1, *samples.shape[1:]))
    coefficients[0] = spectrum[0].real
    coefficients[1 : kept + 1] = 2 * spectrum[1 : kept + 1].real
    coefficients[harmonics + 1 : harmonics + kept + 1] = -2 * spectrum[1 : kept + 1].imag
    return coefficients


def sampled(coefficients: Floats, basis: Floats) -> Floats:
    """Values (n, m, N) of coefficients (n, K, N) with a basis (m, K).

    Always `WIDTH` units in one product, so that a unit's bits do not depend on their number.
    """
    n, size, units = coefficients.shape
    values = np.empty((n, len(basis), units))
    block = np.zeros((size, WIDTH))
    for first in range(0, units, WIDTH):
        here = slice(first, min(first + WIDTH, units))
        for state in range(n):
            block[:, : here.stop - first] = coefficients[state, :, here]
            values[state, :, here] = (basis @ block)[:, : here.stop - first]
    return values


@dataclass(frozen=True)
class Grid:
    """A number of harmonics and the points that devices are evaluated at."""

    harmonics: int

    @property
    def size(self) -> int:
        """K = 2 H + 1."""
        return 2 * self.harmonics + 1

    @property
    def points(self) -> int:
        """Points of the grid the devices are evaluated on."""
        return POINTS_PER_HARMONIC * self.harmonics

    @cached_property
    def synthesis(self) -> Floats:
        """G (points, K)."""
        return synthesis(self.harmonics, self.points)

    @cached_property
    def analysis(self) -> Floats:
        """A (K, points)."""
        weights = np.full((self.size, 1), 2.0 / self.points)
        weights[0] = 1.0 / self.points
        return weights * self.synthesis.T

    @cached_property
    def orders(self) -> Floats:
        """Harmonic numbers 1 ... H as a column."""
        return np.arange(1.0, self.harmonics + 1)[:, None]

    def derive(self, x: Floats) -> Floats:
        """Coefficients of dx/dtheta for x (..., K, M): cosine k s_k, sine -k c_k."""
        h = self.harmonics
        slope = np.zeros_like(x)
        slope[..., 1 : h + 1, :] = self.orders * x[..., h + 1 :, :]
        slope[..., h + 1 :, :] = -self.orders * x[..., 1 : h + 1, :]
        return slope
