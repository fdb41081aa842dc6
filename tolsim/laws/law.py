"""What every law can do, and the checks its parameters pass once, when it is made.

A law is the probability law of one number.  It is frozen, has named parameters, and is
asked for many values at once: nothing is checked again after it was made.
"""

from __future__ import annotations

import math
from abc import ABC, abstractmethod
from dataclasses import dataclass
from itertools import pairwise
from typing import ClassVar

import numpy as np
from numpy.typing import ArrayLike, NDArray

from tolsim.errors import Mistake

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Law(ABC):
    """Probability law of one number.

    `ppf`, `cdf` and `pdf` take and return arrays of any shape; u lies in the open interval (0, 1).
    """

    NAME: ClassVar[str] = ""

    @abstractmethod
    def ppf(self, u: ArrayLike) -> Floats:
        """Value below which a share `u` of the population lies (inverse of `cdf`)."""

    @abstractmethod
    def cdf(self, x: ArrayLike) -> Floats:
        """Share of the population at or below `x`."""

    @abstractmethod
    def pdf(self, x: ArrayLike) -> Floats:
        """Density at `x`, per unit of measure of the value; 0 outside the support."""

    @property
    @abstractmethod
    def mean(self) -> float:
        """Mean of the population."""

    @property
    @abstractmethod
    def sd(self) -> float:
        """Standard deviation of the population."""

    @property
    @abstractmethod
    def support(self) -> tuple[float, float]:
        """Smallest and largest value that can occur."""


def as_floats(values: ArrayLike) -> Floats:
    """Array of float64, shape kept."""
    return np.asarray(values, dtype=np.float64)


def must_be_finite(**parameters: float) -> None:
    """Raise `Mistake` naming the first parameter that is not a finite number."""
    for name, value in parameters.items():
        if not math.isfinite(value):
            raise Mistake("a finite number", key=name, got=f"{value:g}")


def must_be_positive(**parameters: float) -> None:
    """Raise `Mistake` naming the first parameter that is not above zero."""
    for name, value in parameters.items():
        if not (math.isfinite(value) and value > 0.0):
            raise Mistake("a number above 0", key=name, got=f"{value:g}")


def must_rise(**parameters: float) -> None:
    """Raise `Mistake` unless the parameters, in the order given, rise strictly."""
    must_be_finite(**parameters)
    names = list(parameters)
    for lower, upper in pairwise(names):
        if not parameters[lower] < parameters[upper]:
            raise Mistake(
                f"a number above {lower} = {parameters[lower]:g}",
                key=upper,
                got=f"{parameters[upper]:g}",
            )
