"""Preferred values: the E series of IEC 60063:2015, and the nearest value one can buy."""

from __future__ import annotations

import math
from functools import cache
from typing import Final

from tolsim.errors import Mistake

_E24_EXCEPTIONS: Final = {
    26: 27, 29: 30, 32: 33, 35: 36, 38: 39, 42: 43, 46: 47, 83: 82,
}  # fmt: skip
_E192_EXCEPTIONS: Final = {919: 920}
_TWO_FIGURES: Final = 24  # largest series with two figures
_SERIES: Final = (3, 6, 12, 24, 48, 96, 192)
SAME: Final = 1e-6  # relative; values that differ by less are the same, written otherwise


@cache
def e_series(size: int) -> tuple[float, ...]:
    """Values of one decade, 1.0 up to below 10, of E3 ... E192 (IEC 60063:2015).

    The i-th value is 10^(i/size), rounded to two figures up to E24 and to three above.
    Eight values of E24 and one of E192 are written otherwise by the standard; the smaller
    series are every second value of the next larger one of their family.
    """
    if size not in _SERIES:
        raise Mistake("one of E" + ", E".join(map(str, _SERIES)), got=f"E{size}")
    if size <= _TWO_FIGURES:
        whole = [round(10.0 ** (1.0 + i / 24.0)) for i in range(24)]
        return tuple(_E24_EXCEPTIONS.get(v, v) / 10.0 for v in whole)[:: 24 // size]
    fine = [round(10.0 ** (2.0 + i / 192.0)) for i in range(192)]
    return tuple(_E192_EXCEPTIONS.get(v, v) / 100.0 for v in fine)[:: 192 // size]


def nearest_preferred(value: float, size: int) -> float:
    """E-series value nearest to a positive `value`, by ratio."""
    if not value > 0.0:
        raise Mistake("a value above 0", got=f"{value:g}")
    decade = 10.0 ** math.floor(math.log10(value))
    candidates = [v * decade for v in (*e_series(size), 10.0)]
    return min(candidates, key=lambda candidate: max(candidate / value, value / candidate))


def neighbours(value: float, size: int) -> tuple[float, float]:
    """Next smaller and next larger E-series value; a value of the series is skipped itself."""
    if not value > 0.0:
        raise Mistake("a value above 0", got=f"{value:g}")
    decade = 10.0 ** math.floor(math.log10(value))
    candidates = [v * scale * decade for scale in (0.1, 1.0, 10.0) for v in e_series(size)]
    below = max(c for c in candidates if c < value * (1.0 - SAME))
    above = min(c for c in candidates if c > value * (1.0 + SAME))
    return below, above


def is_preferred(value: float, size: int) -> bool:
    """True if `value` is one of the series, but for rounding."""
    return abs(nearest_preferred(value, size) / value - 1.0) <= SAME


def smallest_series(value: float) -> int | None:
    """Size of the smallest E series that has `value`; None if none has it."""
    return next((size for size in _SERIES if is_preferred(value, size)), None)
