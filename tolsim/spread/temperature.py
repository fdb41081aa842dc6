"""How part values follow temperature: laws for the factor on the value at the reference.

Each law may leave one number to chance (a slope, a position inside an envelope): `drawn`
is its probability law, None if nothing is left open.  `factor(drawn, celsius)` is the
multiplier on the part value.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass
from itertools import pairwise
from typing import ClassVar

import numpy as np
from numpy.typing import ArrayLike
from scipy.interpolate import PchipInterpolator

from tolsim.errors import Mistake
from tolsim.laws import Fixed, Floats, Law, Uniform
from tolsim.spread.codes import class1_code, class2_code

ANYWHERE = Uniform(-1.0, 1.0)
TYPICAL = Fixed(1.0)
COPPER_SLOPE = 0.00393  # 1/K at 20 degC, annealed copper (IEC 60028)


@dataclass(frozen=True)
class TemperatureLaw(ABC):
    """Factor on a part value as a function of temperature in degC."""

    NAME: ClassVar[str] = ""
    WHAT: ClassVar[str] = ""  # the number left to chance, for the name of the factor

    @property
    @abstractmethod
    def drawn(self) -> Law | None:
        """Law of the number left to chance."""

    @abstractmethod
    def factor(self, drawn: ArrayLike, celsius: ArrayLike) -> Floats:
        """Multiplier on the value at the reference; `drawn` and `celsius` broadcast."""


@dataclass(frozen=True)
class LinearTemperature(TemperatureLaw):
    """Straight line: 1 + slope (T - reference), slope in 1/K drawn per part."""

    NAME: ClassVar[str] = "linear"
    WHAT: ClassVar[str] = "temperature slope"

    slope: Law
    reference: float = 25.0

    @property
    def drawn(self) -> Law | None:
        """Law of the number left to chance."""
        return self.slope

    def factor(self, drawn: ArrayLike, celsius: ArrayLike) -> Floats:
        """Multiplier on the value at the reference."""
        return 1.0 + np.asarray(drawn) * (np.asarray(celsius) - self.reference)


@dataclass(frozen=True)
class EnvelopeTemperature(TemperatureLaw):
    """A limit curve above and below; each part runs at its own constant share of one of them.

    `points` are (temperature, lower change, upper change), joined by monotone cubics
    (Fritsch & Carlson 1980); beyond the ends the last change is held.  `position` -1 is the
    lower limit curve, 0 no change, +1 the upper one.
    """

    NAME: ClassVar[str] = "envelope"
    WHAT: ClassVar[str] = "temperature position"

    points: tuple[tuple[float, float, float], ...]
    position: Law = ANYWHERE

    def __post_init__(self) -> None:
        _must_rise(self.points)
        low, high = self.position.support
        if low < -1.0 or high > 1.0:
            raise Mistake("a law within -1 .. 1", key="position", got=f"{low:g} .. {high:g}")
        if any(lower > 0.0 or upper < 0.0 for _, lower, upper in self.points):
            raise Mistake(
                "a lower change of at most 0 and an upper one of at least 0", key="points"
            )

    @property
    def drawn(self) -> Law | None:
        """Law of the number left to chance."""
        return self.position

    def factor(self, drawn: ArrayLike, celsius: ArrayLike) -> Floats:
        """Multiplier on the value at the reference."""
        drawn = np.asarray(drawn, dtype=np.float64)
        at, lower, upper = np.array(self.points).T
        celsius = np.clip(celsius, at[0], at[-1])
        change = PchipInterpolator(at, np.column_stack((lower, upper)))(celsius)
        return np.asarray(
            1.0 + np.where(drawn < 0.0, -drawn * change[..., 0], drawn * change[..., 1])
        )


@dataclass(frozen=True)
class CurveTemperature(TemperatureLaw):
    """A typical curve; each part stretches its change by its own factor.

    `points` are (temperature, change), joined by monotone cubics, held beyond the ends.
    """

    NAME: ClassVar[str] = "curve"
    WHAT: ClassVar[str] = "temperature stretch"

    points: tuple[tuple[float, float], ...]
    stretch: Law = TYPICAL

    def __post_init__(self) -> None:
        _must_rise(self.points)

    @property
    def drawn(self) -> Law | None:
        """Law of the number left to chance."""
        return None if isinstance(self.stretch, Fixed) else self.stretch

    def factor(self, drawn: ArrayLike, celsius: ArrayLike) -> Floats:
        """Multiplier on the value at the reference."""
        stretch = self.stretch.mean if isinstance(self.stretch, Fixed) else np.asarray(drawn)
        at, change = np.array(self.points).T
        celsius = np.clip(celsius, at[0], at[-1])
        return np.asarray(1.0 + stretch * PchipInterpolator(at, change)(celsius))


@dataclass(frozen=True)
class CopperTemperature(TemperatureLaw):
    """Resistance of copper: [rho(T) / rho(reference)]^exponent, nothing left to chance.

    Exponent 1 at direct current; 0.5 where the skin depth is far below the wire diameter,
    because the high-frequency resistance goes with the root of the resistivity.
    """

    NAME: ClassVar[str] = "copper"
    WHAT: ClassVar[str] = "temperature"

    reference: float = 25.0
    exponent: float = 1.0

    def __post_init__(self) -> None:
        if not 0.0 < self.exponent <= 1.0:
            raise Mistake("a number above 0, up to 1", key="exponent", got=f"{self.exponent:g}")

    @property
    def drawn(self) -> Law | None:
        """Law of the number left to chance."""
        return None

    def factor(self, drawn: ArrayLike, celsius: ArrayLike) -> Floats:  # noqa: ARG002 - no choice
        """Multiplier on the value at the reference."""
        ratio = 1.0 + COPPER_SLOPE * (np.asarray(celsius, dtype=np.float64) - 20.0)
        ratio = ratio / (1.0 + COPPER_SLOPE * (self.reference - 20.0))
        return np.asarray(np.maximum(ratio, 0.0) ** self.exponent)


def class1_temperature(code: str) -> LinearTemperature:
    """Straight line of a class 1 ceramic code, slope uniform over the band the code allows."""
    decoded = class1_code(code)
    return LinearTemperature(
        Uniform(decoded.slope - decoded.tolerance, decoded.slope + decoded.tolerance)
    )


def class2_temperature(code: str) -> EnvelopeTemperature:
    """Envelope of a class 2 ceramic code: no change at 25 degC, the full change at both ends.

    The code only bounds the change; how it grows towards the ends is left open by EIA-198.
    """
    decoded = class2_code(code)
    low, high = decoded.change_low, decoded.change_high
    return EnvelopeTemperature(
        ((decoded.lowest, low, high), (25.0, 0.0, 0.0), (decoded.highest, low, high))
    )


def _must_rise(points: tuple[tuple[float, ...], ...]) -> None:
    """Raise `Mistake` unless there are two points or more, at rising temperatures."""
    if len(points) <= 1:
        raise Mistake("at least two points", key="points", got=f"{len(points)}")
    at = [point[0] for point in points]
    if any(after <= before for before, after in pairwise(at)):
        raise Mistake("points at rising temperatures", key="points")
