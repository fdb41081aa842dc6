"""The law of the next piece from a reel of which some pieces were measured.

A sample never becomes a certainty.  The law is the posterior predictive one: what is to be
expected of one more piece, the mean and the scatter of the reel being known only as well as
so many readings can tell.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from numpy.typing import ArrayLike
from scipy.integrate import quad

from tolsim.laws.law import Floats, Law, as_floats


@dataclass(frozen=True)
class Exponential(Law):
    """`origin + exp(y)` with y of the law `logarithm`: a factor whose logarithm was fitted."""

    NAME: ClassVar[str] = "exponential"

    logarithm: Law
    origin: float = 0.0

    def ppf(self, u: ArrayLike) -> Floats:
        """Value below which a share `u` of the population lies."""
        return self.origin + np.exp(self.logarithm.ppf(u))

    def cdf(self, x: ArrayLike) -> Floats:
        """Share of the population at or below `x`."""
        ratio = np.maximum(as_floats(x) - self.origin, np.finfo(float).tiny)
        return self.logarithm.cdf(np.log(ratio))

    def pdf(self, x: ArrayLike) -> Floats:
        """Density at `x`."""
        above = as_floats(x) - self.origin
        ratio = np.maximum(above, np.finfo(float).tiny)
        return np.where(above > 0.0, self.logarithm.pdf(np.log(ratio)) / ratio, 0.0)

    def _mean_of(self, power: int, about: float) -> float:
        def integrand(u: float) -> float:
            return float((self.ppf(u) - about) ** power)

        cuts = (0.0, 0.01, 0.1, 0.5, 0.9, 0.99, 1.0)
        pieces = itertools.pairwise(cuts)
        return float(sum(quad(integrand, *piece, epsrel=1e-10)[0] for piece in pieces))

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
        low, high = self.logarithm.support
        return self.origin + math.exp(low), self.origin + math.exp(high)


@dataclass(frozen=True)
class Sample:
    """What was measured, and what was seen in it.

    Attributes
    ----------
    file : str
        Name of the file of readings.
    pieces : int
        How many pieces were measured.
    mean, sd : float
        Of the readings, in the unit of the law.
    noise : float
        Standard deviation of one reading of the meter, taken out of the scatter.
    shape : str
        "normal", "lognormal" or "as measured".
    fit_p : float
        Probability of a worse fit to the normal shape by chance (Anderson-Darling); of the
        logarithms for a lognormal shape.
    values : tuple of float
        The readings, rising.
    remarks : tuple of str
        Sentences about what the readings look like.
    test_frequency : float or None
        Hz, of the meter.
    """

    file: str
    pieces: int
    mean: float
    sd: float
    noise: float
    shape: str
    fit_p: float
    values: tuple[float, ...] = ()
    remarks: tuple[str, ...] = ()
    test_frequency: float | None = None


@dataclass(frozen=True)
class Measured(Law):
    """Law of the next piece: `predictive` is its law, `sample` what it was learnt from."""

    NAME: ClassVar[str] = "measured"

    predictive: Law
    sample: Sample

    def ppf(self, u: ArrayLike) -> Floats:
        """Value below which a share `u` of the population lies."""
        return self.predictive.ppf(u)

    def cdf(self, x: ArrayLike) -> Floats:
        """Share of the population at or below `x`."""
        return self.predictive.cdf(x)

    def pdf(self, x: ArrayLike) -> Floats:
        """Density at `x`."""
        return self.predictive.pdf(x)

    @property
    def mean(self) -> float:
        """Mean of the population."""
        return self.predictive.mean

    @property
    def sd(self) -> float:
        """Standard deviation of the population."""
        return self.predictive.sd

    @property
    def support(self) -> tuple[float, float]:
        """Smallest and largest value that can occur."""
        return self.predictive.support
