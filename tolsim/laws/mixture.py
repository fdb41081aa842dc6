"""A sum of normal humps, cut at two limits: readings smoothed, or a scatter not known exactly."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property
from typing import ClassVar

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import ndtr

from tolsim.errors import Mistake
from tolsim.laws.law import Floats, Law, as_floats, must_be_finite, must_be_positive, must_rise

LEAST_SHARE = 1e-9  # of the whole law that the limits must leave
_BISECTIONS = 44  # of a bracket that is 1/512 of the range: down to its last digits
_TABLE = 513  # values of the law known beforehand, to start from a narrow bracket
_BLOCK = 4096  # values looked for together, to bound memory


@dataclass(frozen=True)
class NormalMixture(Law):
    """Equal shares of normal laws, one per pair of `centres` and `sigmas`, cut at the limits."""

    NAME: ClassVar[str] = "normal-mixture"

    low: float
    high: float
    centres: tuple[float, ...]
    sigmas: tuple[float, ...]

    def __post_init__(self) -> None:
        must_rise(low=self.low, high=self.high)
        if not self.centres or len(self.centres) != len(self.sigmas):
            raise Mistake("as many sigmas as centres, at least one", key="sigmas")
        for centre, sigma in zip(self.centres, self.sigmas, strict=True):
            must_be_finite(centres=centre)
            must_be_positive(sigmas=sigma)
        if not self._mass > LEAST_SHARE:
            raise Mistake(
                "limits that leave some of the population", key="low", got=f"{self.low:g}"
            )

    def _whole(self, x: Floats) -> Floats:
        """Share of the uncut law below `x`, (n,) to (n,)."""
        z = (x[:, None] - np.array(self.centres)) / np.array(self.sigmas)
        return as_floats(np.mean(ndtr(z), axis=1))

    @cached_property
    def _ends(self) -> tuple[float, float]:
        first, last = self._whole(np.array([self.low, self.high]))
        return float(first), float(last)

    @property
    def _mass(self) -> float:
        return self._ends[1] - self._ends[0]

    def cdf(self, x: ArrayLike) -> Floats:
        """Share of the population at or below `x`."""
        x = np.clip(as_floats(x), self.low, self.high)
        return ((self._whole(x.ravel()) - self._ends[0]) / self._mass).reshape(x.shape)

    def pdf(self, x: ArrayLike) -> Floats:
        """Density at `x`."""
        x = as_floats(x)
        sigmas = np.array(self.sigmas)
        z = (x.ravel()[:, None] - np.array(self.centres)) / sigmas
        density = np.mean(np.exp(-0.5 * z**2) / sigmas, axis=1) / math.sqrt(2.0 * math.pi)
        inside = (self.low <= x) & (x <= self.high)
        return np.where(inside, density.reshape(x.shape) / self._mass, 0.0)

    @cached_property
    def _known(self) -> tuple[Floats, Floats]:
        """Points from limit to limit and the share of the uncut law below each."""
        x = np.linspace(self.low, self.high, _TABLE)
        return x, np.maximum.accumulate(self._whole(x))

    def ppf(self, u: ArrayLike) -> Floats:
        """Value below which a share `u` of the population lies, by bisection."""
        u = as_floats(u)
        share = self._ends[0] + u.ravel() * self._mass
        found = np.empty_like(share)
        for start in range(0, share.size, _BLOCK):
            block = slice(start, start + _BLOCK)
            found[block] = self._bisected(share[block])
        return found.reshape(u.shape)

    def _bisected(self, share: Floats) -> Floats:
        x, below = self._known
        at = np.clip(np.searchsorted(below, share, side="left"), 1, _TABLE - 1)
        low, high = x[at - 1], x[at]
        for _ in range(_BISECTIONS):
            middle = 0.5 * (low + high)
            right = self._whole(middle) < share
            low, high = np.where(right, middle, low), np.where(right, high, middle)
        return high

    @property
    def _moments(self) -> tuple[float, float]:
        """Mean and mean square of the cut law, hump by hump (truncated normal moments)."""
        centre, sigma = np.array(self.centres), np.array(self.sigmas)
        below, above = (self.low - centre) / sigma, (self.high - centre) / sigma
        share = ndtr(above) - ndtr(below)
        density_below, density_above = (
            np.exp(-0.5 * z**2) / math.sqrt(2.0 * math.pi) for z in (below, above)
        )
        first = centre * share + sigma * (density_below - density_above)
        slope = below * density_below - above * density_above
        second = (centre**2 + sigma**2) * share + sigma**2 * slope
        second = second + 2.0 * centre * sigma * (density_below - density_above)
        total = float(np.sum(share))
        return float(np.sum(first)) / total, float(np.sum(second)) / total

    @property
    def mean(self) -> float:
        """Mean of the population."""
        return self._moments[0]

    @property
    def sd(self) -> float:
        """Standard deviation of the population."""
        mean, square = self._moments
        return math.sqrt(max(square - mean**2, 0.0))

    @property
    def support(self) -> tuple[float, float]:
        """Smallest and largest value that can occur."""
        return self.low, self.high
