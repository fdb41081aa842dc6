"""How part values drift with age: laws for the factor on the value at the reference age.

Ages are hours by one of two clocks: since the unit was built, or since it was last soldered.
The heat of soldering sets class 2 ceramics back to their first hour; a repair does so again,
while resistors and films beside them go on ageing.  The rate is left to chance: `rate` is its
law.  `factor(rate, hours)` is the multiplier on the part value.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass
from typing import ClassVar, Literal, get_args

import numpy as np
from numpy.typing import ArrayLike

from tolsim.errors import Mistake
from tolsim.laws import Floats, Law

Clock = Literal["build", "soldering"]

HIGHEST_EXPONENT = 3.0  # of a power of time; drift mechanisms stay below 1


@dataclass(frozen=True)
class AgeingLaw(ABC):
    """Factor on a part value as a function of age in hours."""

    NAME: ClassVar[str] = ""
    WHAT: ClassVar[str] = "ageing rate"

    rate: Law

    @property
    def clock(self) -> Clock:
        """What its hours are counted from."""
        return "build"

    @abstractmethod
    def factor(self, rate: ArrayLike, hours: ArrayLike) -> Floats:
        """Multiplier on the value at the reference; `rate` and `hours` broadcast."""


@dataclass(frozen=True)
class LogTimeAgeing(AgeingLaw):
    """Change by `rate` per decade of hours, as class 2 ceramics lose capacitance.

        factor = [1 + rate log10(t / origin)] / [1 + rate log10(reference / origin)]

    (IEC 60384-9 annex, EIA-521.)  `origin` is the age whose value the rate is a share of:
    one hour after the last heating above the Curie point.  `reference` is the age at which
    the part has its marked value, 1000 h by the referee rule.  Makers that state the rate
    as a share of the 1000 h value have origin = reference = 1000 h; the two differ.  Ages
    below `earliest` are taken as `earliest`, because the law has no value at zero.

    Parts come with their marked value, but soldering lifts it to that of the first hour, from
    which it falls again: hours count `since` the last soldering unless a table says "build".
    """

    NAME: ClassVar[str] = "log-time"

    reference: float = 1000.0
    origin: float = 1.0
    earliest: float = 1.0
    since: Clock = "soldering"

    @property
    def clock(self) -> Clock:
        """What its hours are counted from."""
        return self.since

    def __post_init__(self) -> None:
        if self.since not in get_args(Clock):
            raise Mistake('"soldering" or "build"', key="since", got=f'"{self.since}"')
        for name in ("reference", "origin", "earliest"):
            if not getattr(self, name) > 0.0:
                raise Mistake("an age above 0", key=name, got=f"{getattr(self, name):g}")

    def factor(self, rate: ArrayLike, hours: ArrayLike) -> Floats:
        """Multiplier on the value at the reference."""
        rate = np.asarray(rate, dtype=np.float64)
        hours = np.maximum(np.asarray(hours, dtype=np.float64), self.earliest)
        now = 1.0 + rate * np.log10(hours / self.origin)
        return np.asarray(now / (1.0 + rate * np.log10(self.reference / self.origin)))


@dataclass(frozen=True)
class PowerAgeing(AgeingLaw):
    """Change by `rate` (t / reference)^exponent: `rate` is the change at the reference age."""

    NAME: ClassVar[str] = "power"

    reference: float
    exponent: float

    def __post_init__(self) -> None:
        if not self.reference > 0.0:
            raise Mistake("an age above 0", key="reference", got=f"{self.reference:g}")
        if not 0.0 < self.exponent <= HIGHEST_EXPONENT:
            raise Mistake(
                f"a number above 0, up to {HIGHEST_EXPONENT:g}",
                key="exponent",
                got=f"{self.exponent:g}",
            )

    def factor(self, rate: ArrayLike, hours: ArrayLike) -> Floats:
        """Multiplier on the value at the reference."""
        age = np.asarray(hours, dtype=np.float64) / self.reference
        return np.asarray(1.0 + np.asarray(rate) * age**self.exponent)


@dataclass(frozen=True)
class SqrtTimeAgeing(PowerAgeing):
    """Change with the root of time, as diffusion in resistor films makes it."""

    NAME: ClassVar[str] = "sqrt-time"

    exponent: float = 0.5


@dataclass(frozen=True)
class LinearAgeing(PowerAgeing):
    """Change in proportion to time."""

    NAME: ClassVar[str] = "linear"

    exponent: float = 1.0
