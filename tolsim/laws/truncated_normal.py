"""Normal law cut at two limits: production scatter after a test to limits."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import ndtr, ndtri

from tolsim.errors import Mistake
from tolsim.laws.law import Floats, Law, as_floats, must_be_finite, must_be_positive, must_rise

FARTHEST = 8.0  # the nearer limit may lie this many sigma from the centre, no more


@dataclass(frozen=True)
class TruncatedNormal(Law):
    """Normal with `centre` and `sigma` before the cut; nothing outside `low` .. `high`.

    `centre` is the middle of the limits unless given; another centre makes the shifted law
    of a process that runs off target.  Moments: Johnson, Kotz, Balakrishnan, "Continuous
    Univariate Distributions" vol. 1, section 13.10.1.
    """

    NAME: ClassVar[str] = "truncated-normal"

    low: float
    high: float
    sigma: float
    centre: float | None = None

    def __post_init__(self) -> None:
        must_rise(low=self.low, high=self.high)
        must_be_positive(sigma=self.sigma)
        must_be_finite(centre=self._centre)
        below, above = self._limits
        if below > FARTHEST or above < -FARTHEST:
            raise Mistake(
                f"a centre within {FARTHEST:g} sigma of the limits",
                key="centre",
                got=f"{self._centre:g}",
            )

    @property
    def _centre(self) -> float:
        return 0.5 * (self.low + self.high) if self.centre is None else self.centre

    @property
    def _limits(self) -> tuple[float, float]:
        """Limits in sigmas from the centre."""
        return (self.low - self._centre) / self.sigma, (self.high - self._centre) / self.sigma

    def ppf(self, u: ArrayLike) -> Floats:
        """Value below which a share `u` of the population lies."""
        below, above = self._limits
        u = as_floats(u)
        if below > 0.0:  # only the upper tail is left: work from its small end, where digits are
            z = -ndtri((1.0 - u) * ndtr(-below) + u * ndtr(-above))
        else:
            z = ndtri((1.0 - u) * ndtr(below) + u * ndtr(above))
        return np.clip(self._centre + self.sigma * z, self.low, self.high)

    def cdf(self, x: ArrayLike) -> Floats:
        """Share of the population at or below `x`."""
        below, above = self._limits
        z = np.clip((as_floats(x) - self._centre) / self.sigma, below, above)
        if below > 0.0:
            return as_floats((ndtr(-below) - ndtr(-z)) / (ndtr(-below) - ndtr(-above)))
        return as_floats((ndtr(z) - ndtr(below)) / (ndtr(above) - ndtr(below)))

    def pdf(self, x: ArrayLike) -> Floats:
        """Density at `x`."""
        x = as_floats(x)
        z = (x - self._centre) / self.sigma
        density = np.exp(-0.5 * z**2) / (math.sqrt(2.0 * math.pi) * self.sigma * self._mass)
        return np.where((self.low <= x) & (x <= self.high), density, 0.0)

    @property
    def _mass(self) -> float:
        """Share of the uncut law between the limits."""
        below, above = self._limits
        if below > 0.0:
            return float(ndtr(-below) - ndtr(-above))
        return float(ndtr(above) - ndtr(below))

    @property
    def _moments(self) -> tuple[float, float]:
        """Mean and variance in units of sigma, about the centre."""
        below, above = self._limits
        mass = self._mass
        density_below = math.exp(-0.5 * below**2) / math.sqrt(2.0 * math.pi)
        density_above = math.exp(-0.5 * above**2) / math.sqrt(2.0 * math.pi)
        mean = (density_below - density_above) / mass
        return mean, 1.0 + (below * density_below - above * density_above) / mass - mean**2

    @property
    def mean(self) -> float:
        """Mean of the population."""
        return self._centre + self.sigma * self._moments[0]

    @property
    def sd(self) -> float:
        """Standard deviation of the population."""
        return self.sigma * math.sqrt(max(self._moments[1], 0.0))

    @property
    def support(self) -> tuple[float, float]:
        """Smallest and largest value that can occur."""
        return self.low, self.high
