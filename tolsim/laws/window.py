"""Datasheet windows, minimum / typical / maximum, with one or two of them missing.

A sheet states limits, never a law.  The law taken for a window is the plainest one that
says no more than the sheet does, and whoever reads the report is told which:

- minimum and maximum: every value between them equally likely;
- typical as well: half of the parts on each side of it, falling off in a straight line;
- a missing limit mirrors the other one about typical;
- with one value only, a half width is implied (a guess).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from itertools import pairwise
from typing import ClassVar

from numpy.typing import ArrayLike

from tolsim.errors import Mistake
from tolsim.laws.law import Floats, Law
from tolsim.laws.triangular import Asymmetric, Triangular
from tolsim.laws.uniform import Uniform


def completed(
    minimum: float | None, typical: float | None, maximum: float | None, half_width: float
) -> tuple[float, float, float]:
    """Minimum, typical and maximum of a window, missing ones filled in.

    A missing limit mirrors the other one about typical; typical, if missing, is the middle;
    with one value only, the limits lie `half_width` on either side of typical.
    """
    if typical is None:
        if minimum is not None:
            typical = 0.5 * (minimum + maximum) if maximum is not None else minimum + half_width
        else:
            typical = (maximum if maximum is not None else math.nan) - half_width
    below = typical - minimum if minimum is not None else None
    above = maximum - typical if maximum is not None else None
    mirror_below = above if above is not None else half_width
    mirror_above = below if below is not None else half_width
    return (
        typical - (below if below is not None else mirror_below),
        typical,
        typical + (above if above is not None else mirror_above),
    )


@dataclass(frozen=True)
class Window(Law):
    """What a sheet prints of a window.

    `implied_half_width` is needed, and used, only where one value stands alone.  A typical
    value at one of its limits is taken as a triangle with its peak there.
    """

    NAME: ClassVar[str] = "window"

    minimum: float | None = None
    typical: float | None = None
    maximum: float | None = None
    implied_half_width: float | None = None

    def __post_init__(self) -> None:
        given = {"minimum": self.minimum, "typical": self.typical, "maximum": self.maximum}
        known = {name: value for name, value in given.items() if value is not None}
        if not known:
            raise Mistake("at least one of minimum, typical, maximum", key="typical", got="none")
        half = self.implied_half_width
        if (half is None and len(known) == 1) or (half is not None and not half > 0.0):
            cure = "The sheet gives one value only: say how far parts may lie from typical."
            got = "nothing" if half is None else f"{half:g}"
            raise Mistake("a half width above 0", cure, "implied_half_width", got)
        names = list(known)
        # typical may lie at a limit, but the window must have a width
        pairs = [(lower, upper, False) for lower, upper in pairwise(names)]
        for lower, upper, apart in [*pairs, (names[0], names[-1], len(names) > 1)]:
            low, high = known[lower], known[upper]
            if low > high or (apart and low == high):
                raise Mistake(f"a number above {lower} = {low:g}", key=upper, got=f"{high:g}")

    @property
    def whole(self) -> tuple[float, float, float]:
        """Minimum, typical and maximum, missing ones filled in."""
        half = self.implied_half_width or math.nan
        return completed(self.minimum, self.typical, self.maximum, half)

    @property
    def implied(self) -> Law:
        """The law taken for the window."""
        low, typical, high = self.whole
        if self.typical is None and self.minimum is not None and self.maximum is not None:
            return Uniform(low, high)
        if not low < typical < high:
            return Triangular(low, high, typical)
        return Asymmetric(low, typical, high)

    @property
    def missing(self) -> tuple[str, ...]:
        """Names of what the sheet does not say."""
        return tuple(n for n in ("minimum", "typical", "maximum") if getattr(self, n) is None)

    def ppf(self, u: ArrayLike) -> Floats:
        """Value below which a share `u` of the population lies."""
        return self.implied.ppf(u)

    def cdf(self, x: ArrayLike) -> Floats:
        """Share of the population at or below `x`."""
        return self.implied.cdf(x)

    def pdf(self, x: ArrayLike) -> Floats:
        """Density at `x`."""
        return self.implied.pdf(x)

    @property
    def mean(self) -> float:
        """Mean of the population."""
        return self.implied.mean

    @property
    def sd(self) -> float:
        """Standard deviation of the population."""
        return self.implied.sd

    @property
    def support(self) -> tuple[float, float]:
        """Smallest and largest value that can occur."""
        return self.implied.support
