"""The hollow middle: what is left of a population after a tighter bin was picked out of it."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from numpy.typing import ArrayLike
from scipy.integrate import quad

from tolsim.errors import Mistake
from tolsim.laws.law import Floats, Law, as_floats, must_rise


@dataclass(frozen=True)
class SortedOut(Law):
    """Population `whole` without the parts between `removed_low` and `removed_high`.

    Sold as the wider grade after the tighter grade was sorted out for a better price.
    """

    NAME: ClassVar[str] = "sorted-out"

    whole: Law
    removed_low: float
    removed_high: float

    def __post_init__(self) -> None:
        must_rise(removed_low=self.removed_low, removed_high=self.removed_high)
        if not self._removed < 1.0 - 1e-9:
            raise Mistake("a removed bin that leaves some parts", key="removed_high")
        if not self._removed > 0.0:
            raise Mistake("a removed bin inside the law it is taken from", key="removed_low")

    @property
    def _below(self) -> float:
        """Share of the whole population below the bin."""
        return float(self.whole.cdf(self.removed_low))

    @property
    def _removed(self) -> float:
        """Share of the whole population inside the bin."""
        return float(self.whole.cdf(self.removed_high)) - self._below

    def ppf(self, u: ArrayLike) -> Floats:
        """Value below which a share `u` of the population lies."""
        v = as_floats(u) * (1.0 - self._removed)
        left = (v < self._below) | (self._below + self._removed >= 1.0)
        x = self.whole.ppf(np.where(left, v, v + self._removed))
        # Rounding of v must not put a part back into the bin.
        return np.where(left, np.minimum(x, self.removed_low), np.maximum(x, self.removed_high))

    def cdf(self, x: ArrayLike) -> Floats:
        """Share of the population at or below `x`."""
        v = self.whole.cdf(x)
        above = np.maximum(v - self._removed, self._below)
        return np.where(v < self._below, v, above) / (1.0 - self._removed)

    def pdf(self, x: ArrayLike) -> Floats:
        """Density at `x`."""
        x = as_floats(x)
        left = (x <= self.removed_low) | (x >= self.removed_high)
        return np.where(left, self.whole.pdf(x) / (1.0 - self._removed), 0.0)

    def _mean_of(self, power: int, about: float) -> float:
        """Mean of (x - about)^power, by quadrature over the two parts that are left."""

        def integrand(v: float) -> float:
            return float((self.whole.ppf(v) - about) ** power)

        parts = ((0.0, self._below), (self._below + self._removed, 1.0))
        total = sum(quad(integrand, *part, epsabs=1e-14, epsrel=1e-12)[0] for part in parts)
        return float(total / (1.0 - self._removed))

    @property
    def mean(self) -> float:
        """Mean of the population."""
        return self._mean_of(1, 0.0)

    @property
    def sd(self) -> float:
        """Standard deviation of the population."""
        return math.sqrt(self._mean_of(2, self.mean))

    @property
    def support(self) -> tuple[float, float]:
        """Smallest and largest value that can occur."""
        low, high = self.whole.support
        if self._below == 0.0:
            low = max(low, self.removed_high)
        if self._below + self._removed >= 1.0:
            high = min(high, self.removed_low)
        return low, high
