"""Two laws with straight flanks: the triangle, and the two-sided one for lopsided tolerances."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from numpy.typing import ArrayLike

from tolsim.errors import Mistake
from tolsim.laws.law import Floats, Law, as_floats, must_be_finite, must_rise


@dataclass(frozen=True)
class Asymmetric(Law):
    """A straight flank on each side of `mode`, with a stated share of the parts below it.

    For tolerances such as -20/+80 %: the marked value is the mode, and `below` says how
    many parts fall short of it (half of them unless told otherwise).
    """

    NAME: ClassVar[str] = "asymmetric"

    low: float
    mode: float
    high: float
    below: float = 0.5

    def __post_init__(self) -> None:
        must_rise(low=self.low, mode=self.mode, high=self.high)
        if not 0.0 < self.below < 1.0:
            raise Mistake("a share between 0 and 1", key="below", got=f"{self.below:g}")

    def ppf(self, u: ArrayLike) -> Floats:
        """Value below which a share `u` of the population lies."""
        u = as_floats(u)
        left = self.low + (self.mode - self.low) * np.sqrt(np.minimum(u / self.below, 1.0))
        rest = np.minimum((1.0 - u) / (1.0 - self.below), 1.0)
        right = self.high - (self.high - self.mode) * np.sqrt(rest)
        return np.where(u < self.below, left, right)

    def cdf(self, x: ArrayLike) -> Floats:
        """Share of the population at or below `x`."""
        x = np.clip(as_floats(x), self.low, self.high)
        left = self.below * ((x - self.low) / (self.mode - self.low)) ** 2
        right = 1.0 - (1.0 - self.below) * ((self.high - x) / (self.high - self.mode)) ** 2
        return np.where(x < self.mode, left, right)

    def pdf(self, x: ArrayLike) -> Floats:
        """Density at `x`."""
        x = as_floats(x)
        left = 2.0 * self.below * (x - self.low) / (self.mode - self.low) ** 2
        right = 2.0 * (1.0 - self.below) * (self.high - x) / (self.high - self.mode) ** 2
        return np.maximum(np.where(x < self.mode, left, right), 0.0)

    @property
    def mean(self) -> float:
        """Mean of the population."""
        left, right = self.mode - self.low, self.high - self.mode
        return self.mode + ((1.0 - self.below) * right - self.below * left) / 3.0

    @property
    def sd(self) -> float:
        """Standard deviation of the population."""
        left, right = self.mode - self.low, self.high - self.mode
        square = (self.below * left**2 + (1.0 - self.below) * right**2) / 6.0
        return math.sqrt(square - (self.mean - self.mode) ** 2)

    @property
    def support(self) -> tuple[float, float]:
        """Smallest and largest value that can occur."""
        return self.low, self.high


@dataclass(frozen=True)
class Triangular(Law):
    """Triangle with its peak at `mode` (the middle of the limits unless given)."""

    NAME: ClassVar[str] = "triangular"

    low: float
    high: float
    mode: float | None = None

    def __post_init__(self) -> None:
        must_rise(low=self.low, high=self.high)
        must_be_finite(mode=self._peak)
        if not self.low <= self._peak <= self.high:
            raise Mistake(
                f"a number from {self.low:g} to {self.high:g}", key="mode", got=f"{self._peak:g}"
            )

    @property
    def _peak(self) -> float:
        return 0.5 * (self.low + self.high) if self.mode is None else self.mode

    def ppf(self, u: ArrayLike) -> Floats:
        """Value below which a share `u` of the population lies."""
        u = as_floats(u)
        width, left, right = self.high - self.low, self._peak - self.low, self.high - self._peak
        from_low = self.low + np.sqrt(u * width * left)
        from_high = self.high - np.sqrt((1.0 - u) * width * right)
        return np.where(u * width < left, from_low, from_high)

    def cdf(self, x: ArrayLike) -> Floats:
        """Share of the population at or below `x`."""
        x = np.clip(as_floats(x), self.low, self.high)
        width, left, right = self.high - self.low, self._peak - self.low, self.high - self._peak
        # A flank of no width is never chosen, yet must not divide by zero.
        from_low = (x - self.low) ** 2 / (width * (left or 1.0))
        from_high = 1.0 - (self.high - x) ** 2 / (width * (right or 1.0))
        return np.where(x < self._peak, from_low, from_high)

    def pdf(self, x: ArrayLike) -> Floats:
        """Density at `x`."""
        x = as_floats(x)
        width, left, right = self.high - self.low, self._peak - self.low, self.high - self._peak
        from_low = 2.0 * (x - self.low) / (width * (left or 1.0))
        from_high = 2.0 * (self.high - x) / (width * (right or 1.0))
        rising = (x < self._peak) if right else (x <= self._peak)
        return np.maximum(np.where(rising, from_low, from_high), 0.0)

    @property
    def mean(self) -> float:
        """Mean of the population."""
        return (self.low + self.high + self._peak) / 3.0

    @property
    def sd(self) -> float:
        """Standard deviation of the population."""
        low, peak, high = self.low, self._peak, self.high
        square = low**2 + peak**2 + high**2 - low * peak - low * high - peak * high
        return math.sqrt(square / 18.0)

    @property
    def support(self) -> tuple[float, float]:
        """Smallest and largest value that can occur."""
        return self.low, self.high
