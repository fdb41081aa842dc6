"""Percentiles with intervals that need no assumed distribution, and Wilks tolerance bounds.

The interval of a quantile runs between two readings of the sorted sample, chosen from the
binomial law of how many readings lie below it (David and Nagaraja, Order Statistics, 3rd
ed., section 7.1).  A sample too small to bound a tail says so with an infinite end.
Tolerance bounds: Wilks, Ann. Math. Statist. 12 (1941) 91-96.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.stats import binom

from tolsim.stats.proportion import check_confidence

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Percentiles:
    """Quantiles of one sample.

    `value`, `low`, `high` are (q,), one entry per wanted share; `units` readings were
    used and `missing` were not numbers.  An infinite end means that this many units
    cannot bound the quantile on that side.
    """

    shares: tuple[float, ...]
    value: Floats
    low: Floats
    high: Floats
    units: int
    missing: int


def percentiles(
    values: ArrayLike, shares: Sequence[float] = (0.5, 0.95, 0.99), confidence: float = 0.95
) -> Percentiles:
    """Quantiles of a sample with order-statistic intervals.

    The value between two readings is interpolated at rank share x (n + 1), as in the
    NIST/SEMATECH e-Handbook 7.2.6.2; it always lies inside its interval.

    Parameters
    ----------
    values : array_like (n,)
        Readings; NaN and infinities count as missing.
    shares : sequence of float (q,)
        Wanted shares of the units below, each between 0 and 1.
    confidence : float
        Two-sided, at least this for any continuous distribution.

    Raises
    ------
    ValueError
        If a share or the confidence is not in (0, 1).
    """
    check_confidence(confidence)
    wanted = np.asarray(shares, float)
    if np.any(wanted <= 0) or np.any(wanted >= 1):
        raise ValueError(f"`shares` must lie between 0 and 1 (got {tuple(shares)!r})")
    given = np.asarray(values, float).ravel()
    known = np.sort(given[np.isfinite(given)])
    n = known.size
    missing = given.size - n
    if n == 0:
        empty = np.full(wanted.shape, np.nan)
        return Percentiles(tuple(shares), empty, empty - np.inf, empty + np.inf, 0, missing)
    first, last = _interval_ranks(n, wanted, confidence)
    padded = np.concatenate([[-np.inf], known, [np.inf]])  # rank 0 and n + 1: no bound
    return Percentiles(
        shares=tuple(shares),
        value=np.quantile(known, wanted, method="weibull"),
        low=padded[first],
        high=padded[last],
        units=n,
        missing=missing,
    )


def _interval_ranks(
    n: int, shares: Floats, confidence: float
) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Ranks (1..n) between which the quantiles lie; 0 and n + 1 where no reading will do."""
    tail = 0.5 * (1.0 - confidence)
    # B = number of readings below the quantile ~ binomial(n, share).
    # P(reading r lies above it) = P(B < r): the largest r with that at most `tail`.
    first = binom.ppf(tail, n, shares)
    # P(reading s lies below it) = P(B >= s): the smallest s with that at most `tail`.
    last = binom.isf(tail, n, shares) + 1
    return np.maximum(first, 0).astype(np.intp), np.minimum(last, n + 1).astype(np.intp)


def wilks_units(
    coverage: float, confidence: float, order: int = 1, sides: Literal[1, 2] = 1
) -> int:
    """Smallest sample whose `order`-th extreme reading(s) bound `coverage` of all units.

    Parameters
    ----------
    coverage, confidence : float
        Share of units inside the bound, and how sure; both between 0 and 1.
    order : int
        1 uses the very largest reading, 2 the second largest, ...
    sides : 1 or 2
        2 bounds both ends, each by its `order`-th extreme reading.

    Raises
    ------
    ValueError
        If an argument is outside its range.
    """
    check_confidence(confidence)
    if not 0.0 < coverage < 1.0 or order < 1 or sides not in (1, 2):
        raise ValueError("`coverage` must lie in (0, 1), `order` be 1 or more, `sides` 1 or 2")
    outside = order * sides

    def enough(n: int) -> bool:
        return bool(binom.cdf(n - outside, n, coverage) >= confidence)

    high = outside
    while not enough(high):
        high *= 2
    low = high // 2
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if enough(middle) else (middle, high)
    return high


def tolerance_bound(
    values: ArrayLike,
    coverage: float = 0.95,
    confidence: float = 0.95,
    side: Literal["high", "low"] = "high",
) -> float:
    """One-sided bound that `coverage` of all units respect, with `confidence` (Wilks).

    Parameters
    ----------
    values : array_like (n,)
        Readings; NaN and infinities are left out.
    side : "high" or "low"
        Whether the bound is an upper or a lower one.

    Returns
    -------
    float
        The bound; infinite when the sample is too small for it (below `wilks_units`).

    Raises
    ------
    ValueError
        If `coverage` or `confidence` is not in (0, 1).
    """
    check_confidence(confidence)
    if not 0.0 < coverage < 1.0:
        raise ValueError(f"`coverage` must lie between 0 and 1 (got {coverage!r})")
    given = np.asarray(values, float).ravel()
    sign = 1.0 if side == "high" else -1.0
    known = np.sort(sign * given[np.isfinite(given)])
    rank = int(binom.ppf(confidence, known.size, coverage)) + 1
    return sign * float(known[rank - 1]) if 1 <= rank <= known.size else sign * float("inf")
