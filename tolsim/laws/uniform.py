"""Every value between two limits equally likely; and the law that never varies."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from numpy.typing import ArrayLike

from tolsim.laws.law import Floats, Law, as_floats, must_be_finite, must_rise


@dataclass(frozen=True)
class Uniform(Law):
    """Equally likely between `low` and `high`: what a tolerance alone tells."""

    NAME: ClassVar[str] = "uniform"

    low: float
    high: float

    def __post_init__(self) -> None:
        must_rise(low=self.low, high=self.high)

    def ppf(self, u: ArrayLike) -> Floats:
        """Value below which a share `u` of the population lies."""
        # Both ends weighted, so that rounding cannot step over a limit.
        u = as_floats(u)
        return self.low * (1.0 - u) + self.high * u

    def cdf(self, x: ArrayLike) -> Floats:
        """Share of the population at or below `x`."""
        return np.clip((as_floats(x) - self.low) / (self.high - self.low), 0.0, 1.0)

    def pdf(self, x: ArrayLike) -> Floats:
        """Density at `x`."""
        x = as_floats(x)
        return np.where((self.low <= x) & (x <= self.high), 1.0 / (self.high - self.low), 0.0)

    @property
    def mean(self) -> float:
        """Mean of the population."""
        return 0.5 * (self.low + self.high)

    @property
    def sd(self) -> float:
        """Standard deviation of the population."""
        return (self.high - self.low) / math.sqrt(12.0)

    @property
    def support(self) -> tuple[float, float]:
        """Smallest and largest value that can occur."""
        return self.low, self.high


@dataclass(frozen=True)
class Fixed(Law):
    """Always `value`: a known slope or rate, or a spread switched off."""

    NAME: ClassVar[str] = "fixed"

    value: float

    def __post_init__(self) -> None:
        must_be_finite(value=self.value)

    def ppf(self, u: ArrayLike) -> Floats:
        """Value below which a share `u` of the population lies."""
        return np.full_like(as_floats(u), self.value)

    def cdf(self, x: ArrayLike) -> Floats:
        """Share of the population at or below `x`."""
        return as_floats(as_floats(x) >= self.value)

    def pdf(self, x: ArrayLike) -> Floats:
        """Density at `x`: all of it in one point, so infinite there."""
        return np.where(as_floats(x) == self.value, np.inf, 0.0)

    @property
    def mean(self) -> float:
        """Mean of the population."""
        return self.value

    @property
    def sd(self) -> float:
        """Standard deviation of the population."""
        return 0.0

    @property
    def support(self) -> tuple[float, float]:
        """Smallest and largest value that can occur."""
        return self.value, self.value
