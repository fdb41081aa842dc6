"""Lognormal law, bounded where the maker bounds it: losses, ratios, lives."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import ndtr, ndtri

from tolsim.errors import Mistake
from tolsim.laws.law import Floats, Law, as_floats, must_be_finite, must_be_positive

LEAST_SHARE = 1e-12  # of the whole law that the bounds must leave


@dataclass(frozen=True)
class LogNormal(Law):
    """`x - origin` is lognormal: its logarithm is normal with standard deviation `sigma`.

    For relative deviations the origin is -1: then 1 + x, the factor on the nominal value,
    is lognormal, and `median` = 0 means that half of the parts lie below nominal.
    `median` belongs to the law before it is cut at `low` and `high`; either bound may be
    left out.
    """

    NAME: ClassVar[str] = "lognormal"

    median: float
    sigma: float
    low: float | None = None
    high: float | None = None
    origin: float = 0.0

    def __post_init__(self) -> None:
        must_be_finite(median=self.median, origin=self.origin)
        must_be_positive(sigma=self.sigma)
        if self.median <= self.origin:
            raise Mistake(f"a number above {self.origin:g}", key="median", got=f"{self.median:g}")
        low, high = self.support
        if not low < high:
            raise Mistake(f"a number above low = {low:g}", key="high", got=f"{high:g}")
        below, above = self._limits
        if not ndtr(above) - ndtr(below) > LEAST_SHARE:
            raise Mistake("limits that leave some of the population", key="low", got=f"{low:g}")

    @property
    def _scale(self) -> float:
        return self.median - self.origin

    @property
    def _limits(self) -> tuple[float, float]:
        """Limits in sigmas of the logarithm."""
        low, high = self.support
        below = -math.inf
        if low > self.origin:
            below = math.log((low - self.origin) / self._scale) / self.sigma
        above = math.inf
        if math.isfinite(high):
            above = math.log((high - self.origin) / self._scale) / self.sigma
        return below, above

    def ppf(self, u: ArrayLike) -> Floats:
        """Value below which a share `u` of the population lies."""
        below, above = self._limits
        u = as_floats(u)
        z = ndtri((1.0 - u) * ndtr(below) + u * ndtr(above))
        return np.clip(self.origin + self._scale * np.exp(self.sigma * z), *self.support)

    def cdf(self, x: ArrayLike) -> Floats:
        """Share of the population at or below `x`."""
        below, above = self._limits
        ratio = np.maximum(as_floats(x) - self.origin, np.finfo(float).tiny) / self._scale
        z = np.clip(np.log(ratio) / self.sigma, below, above)
        return as_floats((ndtr(z) - ndtr(below)) / (ndtr(above) - ndtr(below)))

    def pdf(self, x: ArrayLike) -> Floats:
        """Density at `x`."""
        x = as_floats(x)
        below, above = self._limits
        low, high = self.support
        offset = np.maximum(x - self.origin, np.finfo(float).tiny)
        z = np.log(offset / self._scale) / self.sigma
        mass = (ndtr(above) - ndtr(below)) * self.sigma * math.sqrt(2.0 * math.pi)
        return np.where((low < x) & (x <= high), np.exp(-0.5 * z**2) / (offset * mass), 0.0)

    def _moment(self, order: int) -> float:
        """Mean of (x - origin)^order: partial moments of the lognormal law."""
        below, above = self._limits
        shift = order * self.sigma
        share = (ndtr(above - shift) - ndtr(below - shift)) / (ndtr(above) - ndtr(below))
        return float(self._scale**order * math.exp(0.5 * shift**2) * share)

    @property
    def mean(self) -> float:
        """Mean of the population."""
        return self.origin + self._moment(1)

    @property
    def sd(self) -> float:
        """Standard deviation of the population."""
        return math.sqrt(max(self._moment(2) - self._moment(1) ** 2, 0.0))

    @property
    def support(self) -> tuple[float, float]:
        """Smallest and largest value that can occur."""
        low = self.origin if self.low is None else max(self.low, self.origin)
        return low, math.inf if self.high is None else self.high
