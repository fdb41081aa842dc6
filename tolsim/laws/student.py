"""Student's t, cut at two limits: what a sample of readings tells about the next piece."""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from numpy.typing import ArrayLike
from scipy.integrate import quad
from scipy.special import gammaln, stdtr, stdtrit

from tolsim.errors import Mistake
from tolsim.laws.law import Floats, Law, as_floats, must_be_finite, must_be_positive, must_rise

LEAST_SHARE = 1e-9  # of the whole law that the limits must leave


@dataclass(frozen=True)
class StudentT(Law):
    """`centre + scale * t`, t of `degrees_of_freedom`; nothing outside `low` .. `high`.

    Tails that fall slower than those of the normal law: with few degrees of freedom a far
    value is less of a surprise.
    """

    NAME: ClassVar[str] = "student-t"

    low: float
    high: float
    centre: float
    scale: float
    degrees_of_freedom: float

    def __post_init__(self) -> None:
        must_rise(low=self.low, high=self.high)
        must_be_finite(centre=self.centre)
        must_be_positive(scale=self.scale, degrees_of_freedom=self.degrees_of_freedom)
        if not self._mass > LEAST_SHARE:
            raise Mistake(
                "limits that leave some of the population", key="low", got=f"{self.low:g}"
            )

    @property
    def _limits(self) -> tuple[float, float]:
        """Limits in scales from the centre."""
        return (self.low - self.centre) / self.scale, (self.high - self.centre) / self.scale

    @property
    def _mirrored(self) -> bool:
        """True if only the upper tail is left: then work from its small end, where digits are."""
        return self._limits[0] > 0.0

    @property
    def _ends(self) -> tuple[float, float]:
        """Shares of the whole law below the two limits (above them, if mirrored)."""
        below, above = self._limits
        sign = -1.0 if self._mirrored else 1.0
        shares = stdtr(self.degrees_of_freedom, np.array([sign * below, sign * above]))
        return float(shares[0]), float(shares[1])

    @property
    def _mass(self) -> float:
        first, last = self._ends
        return abs(last - first)

    def ppf(self, u: ArrayLike) -> Floats:
        """Value below which a share `u` of the population lies."""
        u = as_floats(u)
        first, last = self._ends
        sign = -1.0 if self._mirrored else 1.0
        z = sign * stdtrit(self.degrees_of_freedom, (1.0 - u) * first + u * last)
        return np.clip(self.centre + self.scale * z, self.low, self.high)

    def cdf(self, x: ArrayLike) -> Floats:
        """Share of the population at or below `x`."""
        z = np.clip((as_floats(x) - self.centre) / self.scale, *self._limits)
        first, last = self._ends
        sign = -1.0 if self._mirrored else 1.0
        return as_floats((stdtr(self.degrees_of_freedom, sign * z) - first) / (last - first))

    def _density(self, z: ArrayLike) -> Floats:
        """Density of the uncut law, z in scales from the centre."""
        n = self.degrees_of_freedom
        log_height = gammaln(0.5 * (n + 1.0)) - gammaln(0.5 * n) - 0.5 * math.log(n * math.pi)
        return as_floats(np.exp(log_height - 0.5 * (n + 1.0) * np.log1p(as_floats(z) ** 2 / n)))

    def pdf(self, x: ArrayLike) -> Floats:
        """Density at `x`."""
        x = as_floats(x)
        density = self._density((x - self.centre) / self.scale) / (self.scale * self._mass)
        return np.where((self.low <= x) & (x <= self.high), density, 0.0)

    def _moment(self, order: int, about: float) -> float:
        """Mean of (z - about)^order, z in scales from the centre, by quadrature."""

        def integrand(z: float) -> float:
            return float((z - about) ** order * self._density(z))

        below, above = self._limits
        breaks = sorted({below, above, *(b for b in (-3.0, 0.0, 3.0) if below < b < above)})
        pieces = itertools.pairwise(breaks)
        return float(sum(quad(integrand, a, b, epsrel=1e-11)[0] for a, b in pieces) / self._mass)

    @property
    def mean(self) -> float:
        """Mean of the population."""
        return self.centre + self.scale * self._moment(1, 0.0)

    @property
    def sd(self) -> float:
        """Standard deviation of the population."""
        return self.scale * math.sqrt(self._moment(2, self._moment(1, 0.0)))

    @property
    def support(self) -> tuple[float, float]:
        """Smallest and largest value that can occur."""
        return self.low, self.high
