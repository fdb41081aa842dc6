"""What a spread table says, checked and frozen: the laws of one part family and grade.

    value = nominal (1 + lot shift + tolerance) x temperature(T) x ageing(hours)

The lot shift is one draw for all parts fed from the same reel; the tolerance is the
scatter inside a lot, one draw per part (per piece in a bank).  Temperature and ageing are
not scatter: the law is shared, only its slope, position or rate may differ per part.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Final, Literal

from tolsim.laws import Law
from tolsim.spread.ageing import AgeingLaw
from tolsim.spread.temperature import TemperatureLaw

Basis = Literal["standard", "datasheet", "measured", "common practice", "guess"]
Deviation = Literal["relative", "absolute", "position"]
Aspect = Literal["tolerance", "lot", "temperature", "ageing", "meter", "condition"]

BASES: Final = ("standard", "datasheet", "measured", "common practice", "guess")
DEVIATIONS: Final = ("relative", "absolute", "position")
ASPECTS: Final = ("tolerance", "lot", "temperature", "ageing", "meter")
FOLLOWING: Final = ("tolerance", "lot")
"""Aspects in which one quantity of a part may follow another."""


@dataclass(frozen=True)
class Origin:
    """Where a law comes from."""

    basis: Basis
    source: str


@dataclass(frozen=True)
class QuantitySpread:
    """Laws of one quantity of a part; a law that is None does not apply.

    Attributes
    ----------
    meter : Law or None
        Error of the meter whose readings the other laws come from: unknown, and the same for
        all parts that follow the table.
    deviation : str
        How `tolerance`, `lot` and `meter` are meant: "relative" to nominal, "absolute" in the
        unit of measure of the quantity, or for thresholds a "position" in the datasheet window,
        -1 at minimum, 0 at typical, +1 at maximum.
    implied_half_window : float
        V; half of the threshold window where neither sheet nor model gives one.
    shared : frozenset of str
        Of "temperature" and "ageing", those drawn once per reel instead of once per part.
    tracking : mapping
        Correlation between parts of one reel, by the aspect it holds for (Gaussian copula).
    follows : mapping
        Correlation with other quantities of the same part, in lot shift and in tolerance.
    origins : mapping
        Origin of each law, by aspect; of `follows` too.
    """

    tolerance: Law | None = None
    lot: Law | None = None
    temperature: TemperatureLaw | None = None
    ageing: AgeingLaw | None = None
    meter: Law | None = None
    deviation: Deviation = "relative"
    implied_half_window: float = 1.0
    shared: frozenset[str] = frozenset()
    tracking: Mapping[str, float] = field(default_factory=dict)
    follows: Mapping[str, float] = field(default_factory=dict)
    origins: Mapping[str, Origin] = field(default_factory=dict)

    def drawn(self, aspect: str) -> Law | None:
        """Law of the number that `aspect` leaves to chance; None if it leaves none."""
        if aspect == "tolerance":
            return self.tolerance
        if aspect == "lot":
            return self.lot
        if aspect == "meter":
            return self.meter
        if aspect == "temperature":
            return self.temperature.drawn if self.temperature else None
        return self.ageing.rate if self.ageing else None


@dataclass(frozen=True)
class SpreadTable:
    """One entry of `distributions/`: a part family and grade with its laws and their origin.

    `file`, `sha256` and `file_text` are the record of the file it was read from, so that a run
    can store what it used; `readings` holds the files of meter readings it names, text by path
    relative to the table file.  Changed readings change `sha256`.
    """

    name: str
    title: str
    kinds: tuple[str, ...]
    basis: Basis
    source: str
    quantities: Mapping[str, QuantitySpread]
    file: str = ""
    sha256: str = ""
    file_text: str = field(default="", repr=False, compare=False)
    readings: Mapping[str, str] = field(default_factory=dict, repr=False, compare=False)

    def owner(self, part: str, aspect: str) -> str:
        """Whose draw an aspect is: the part's own, or the meter's that all readings come from."""
        return f"readings of {self.name}" if aspect == "meter" else part

    @property
    def guesses(self) -> tuple[str, ...]:
        """Addresses like "capacitance lot" of the laws that are guesses."""
        return tuple(
            f"{quantity} {aspect}"
            for quantity, spread in self.quantities.items()
            for aspect, origin in spread.origins.items()
            if origin.basis == "guess"
        )


def correlations(quantities: Mapping[str, QuantitySpread]) -> dict[tuple[str, str], float]:
    """Pairs of quantities of one part that depend on each other, with their correlation."""
    return {
        (name, leader): rho
        for name, spread in quantities.items()
        for leader, rho in spread.follows.items()
    }
