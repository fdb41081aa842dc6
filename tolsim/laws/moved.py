"""A law moved as a whole, as by a meter that is off by one amount for every reading."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

from numpy.typing import ArrayLike

from tolsim.laws.law import Floats, Law, as_floats, must_be_finite


@dataclass(frozen=True)
class Moved(Law):
    """Every value of `law`, plus `by`."""

    NAME: ClassVar[str] = "moved"

    law: Law
    by: float

    def __post_init__(self) -> None:
        must_be_finite(by=self.by)

    def ppf(self, u: ArrayLike) -> Floats:
        """Value below which a share `u` of the population lies."""
        return self.law.ppf(u) + self.by

    def cdf(self, x: ArrayLike) -> Floats:
        """Share of the population at or below `x`."""
        return self.law.cdf(as_floats(x) - self.by)

    def pdf(self, x: ArrayLike) -> Floats:
        """Density at `x`."""
        return self.law.pdf(as_floats(x) - self.by)

    @property
    def mean(self) -> float:
        """Mean of the population."""
        return self.law.mean + self.by

    @property
    def sd(self) -> float:
        """Standard deviation of the population."""
        return self.law.sd

    @property
    def support(self) -> tuple[float, float]:
        """Smallest and largest value that can occur."""
        low, high = self.law.support
        return low + self.by, high + self.by
