"""Other laws with the same promised limits: what a tolerance alone leaves open.

A maker who promises +-5 % says nothing about what lies between.  These are the usual ways the
band is filled; common practice, no source.
"""

from __future__ import annotations

from collections.abc import Callable, Collection, Mapping
from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from tolsim.laws import Fixed, Law, Moved, SortedOut, TruncatedNormal, Uniform
from tolsim.spread.table import QuantitySpread, SpreadTable

SIGMAS: Final = 3.0  # of the normal laws between the middle of the band and its ends
SHIFT: Final = 0.5  # of the half width, for a process that runs off target
REMOVED: Final = 0.5  # of the half width, sorted out as the better grade
FARTHEST: Final = 0.005  # share of an unbounded law left outside the band on each side

REPLACED: Final = ("tolerance", "lot")


@dataclass(frozen=True)
class Alternative:
    """One way of filling a promised band.

    Attributes
    ----------
    name : str
        "uniform", "normal", "shifted down", "shifted up", "sorted out".
    words : str
        What it means, as a phrase.
    within : callable
        (low, high) to the law between them.
    aspects : tuple of str
        Laws it can stand for: nobody sorts whole lots out of a lot law.
    shift : float
        Of the mean, in half widths.
    meter : int
        -1 or 1 if it leaves the band as it is and moves what was measured to the lower or upper
        end of the law of the meter's error.
    """

    name: str
    words: str
    within: Callable[[float, float], Law]
    aspects: tuple[str, ...] = REPLACED
    shift: float = 0.0
    meter: int = 0


def band(law: Law) -> tuple[float, float]:
    """Limits a law promises; of an unbounded one the values 0.5 % of the parts lie beyond."""
    low, high = law.support
    far_low, far_high = law.ppf(np.array([FARTHEST, 1.0 - FARTHEST]))
    return (
        float(low if np.isfinite(low) and np.isfinite(high) else far_low),
        float(high if np.isfinite(high) else far_high),
    )


def basis_of(spread: QuantitySpread, aspect: str) -> str:
    """What a law rests on; empty if nothing is said."""
    origin = spread.origins.get(aspect)
    return "" if origin is None else origin.basis


def _normal(shift: float) -> Callable[[float, float], Law]:
    def within(low: float, high: float) -> Law:
        half = 0.5 * (high - low)
        return TruncatedNormal(low, high, half / SIGMAS, 0.5 * (low + high) + shift * half)

    return within


def _hollow(low: float, high: float) -> Law:
    middle, half = 0.5 * (low + high), 0.5 * (high - low)
    return SortedOut(Uniform(low, high), middle - REMOVED * half, middle + REMOVED * half)


ALTERNATIVES: Final[tuple[Alternative, ...]] = (
    Alternative("uniform", "every value of the band equally likely", Uniform),
    Alternative("normal", "bell curve in the middle, 3 sigma to the limits", _normal(0.0)),
    Alternative(
        "shifted down", "bell curve halfway to the lower limit", _normal(-SHIFT), shift=-SHIFT
    ),
    Alternative("shifted up", "bell curve halfway to the upper limit", _normal(SHIFT), shift=SHIFT),
    Alternative(
        "sorted out", "inner half of the band sold as a better grade", _hollow, ("tolerance",)
    ),
)

METERS: Final[tuple[Alternative, ...]] = (
    Alternative("meter reads high", "parts lower than read by all it may err", Uniform, meter=-1),
    Alternative("meter reads low", "parts higher than read by all it may err", Uniform, meter=1),
)
"""Ways in which readings may be wrong all alike."""


def replaceable(law: Law | None, basis: str = "") -> bool:
    """Tell whether a law leaves anything to chance that another could leave differently.

    A law fitted to readings is knowledge, not a promise: it stays.
    """
    if basis == "measured" or law is None or isinstance(law, Fixed):
        return False
    low, high = band(law)
    return low < high


def replacement(law: Law | None, aspect: str, other: Alternative, basis: str = "") -> Law | None:
    """The alternative in place of a law; the law itself where the alternative does not apply."""
    if law is None or aspect not in other.aspects or not replaceable(law, basis):
        return law
    return other.within(*band(law))


def with_alternative(
    tables: Mapping[str, SpreadTable], names: Collection[str], other: Alternative
) -> dict[str, SpreadTable]:
    """Spread tables with the tolerance and lot laws of some of them replaced."""
    changed = dict(tables)
    for name in names:
        quantities = {
            quantity: _replaced(spread, other)
            for quantity, spread in tables[name].quantities.items()
        }
        changed[name] = replace(tables[name], quantities=quantities)
    return changed


def replaced_law(spread: QuantitySpread, aspect: str, other: Alternative) -> Law | None:
    """Tolerance or lot law of a quantity under an alternative."""
    law: Law | None = getattr(spread, aspect)
    if not other.meter:
        return replacement(law, aspect, other, basis_of(spread, aspect))
    carrier = "lot" if spread.tolerance is None else "tolerance"
    if law is None or spread.meter is None or aspect != carrier:
        return law
    low, high = band(spread.meter)
    return Moved(law, low if other.meter < 0 else high)


def _replaced(spread: QuantitySpread, other: Alternative) -> QuantitySpread:
    return replace(
        spread,
        tolerance=replaced_law(spread, "tolerance", other),
        lot=replaced_law(spread, "lot", other),
    )
