"""How sure a counted share is: exact binomial intervals, and a yield with undecided units.

The interval is that of Clopper and Pearson, Biometrika 26 (1934) 404-413: it covers the
true share with at least the wanted confidence, also for zero or all units.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.stats import beta

Floats = NDArray[np.float64]


def check_confidence(confidence: float) -> None:
    """Refuse a confidence outside (0, 1).

    Raises
    ------
    ValueError
        If `confidence` is not strictly between 0 and 1.
    """
    if not 0.0 < confidence < 1.0:
        raise ValueError(f"`confidence` must lie between 0 and 1 (got {confidence!r}), e.g. 0.95")


def share_interval(
    count: ArrayLike, units: ArrayLike, confidence: float = 0.95
) -> tuple[Floats, Floats]:
    """Exact two-sided interval of a share, Clopper-Pearson.

    Parameters
    ----------
    count, units : array_like (...,)
        How many of how many; they broadcast against each other.
    confidence : float
        Two-sided confidence, between 0 and 1.

    Returns
    -------
    low, high : ndarray (...,)
        0 and 1 where there are no units at all: nothing is known then.

    Raises
    ------
    ValueError
        If `confidence` is not in (0, 1) or a count is not within 0..units.
    """
    check_confidence(confidence)
    hits, total = np.broadcast_arrays(np.asarray(count, float), np.asarray(units, float))
    if np.any(hits < 0) or np.any(hits > total):
        raise ValueError("`count` must lie between 0 and `units`")
    tail = 0.5 * (1.0 - confidence)
    misses = total - hits
    # The beta law needs positive parameters; the ends 0 and `units` have closed answers.
    low = beta.ppf(tail, np.maximum(hits, 1.0), misses + 1.0)
    high = beta.ppf(1.0 - tail, hits + 1.0, np.maximum(misses, 1.0))
    return (
        np.asarray(np.where(hits == 0, 0.0, low), np.float64),
        np.asarray(np.where(misses == 0, 1.0, high), np.float64),
    )


def share_upper_bound(count: ArrayLike, units: ArrayLike, confidence: float = 0.95) -> Floats:
    """One-sided upper bound of a share; about 3/n at 95 % when nothing was counted.

    Parameters
    ----------
    count, units : array_like (...,)
        How many of how many.
    confidence : float
        One-sided confidence, between 0 and 1.

    Raises
    ------
    ValueError
        If `confidence` is not in (0, 1) or a count is not within 0..units.
    """
    check_confidence(confidence)
    return share_interval(count, units, max(2.0 * confidence - 1.0, 1e-12))[1]


@dataclass(frozen=True)
class YieldEstimate:
    """Yield of `units` simulated units; every one of them is counted.

    `estimate` is passed / units.  Nobody knows what an undecided unit does, so `low` takes
    all of them as failed and `high` takes all of them as passed.
    """

    estimate: float
    low: float
    high: float
    confidence: float
    units: int
    passed: int
    failed: int
    undecided: int


def yield_estimate(
    passed: int, failed: int, undecided: int = 0, confidence: float = 0.95
) -> YieldEstimate:
    """Yield with its exact interval, undecided units widening it on both sides.

    Raises
    ------
    ValueError
        If there are no units, a count is negative or `confidence` is not in (0, 1).
    """
    units = passed + failed + undecided
    if units < 1:
        raise ValueError("a yield needs at least one unit (got none)")
    low, _ = share_interval(passed, units, confidence)
    _, high = share_interval(passed + undecided, units, confidence)
    return YieldEstimate(
        estimate=passed / units,
        low=float(low),
        high=float(high),
        confidence=confidence,
        units=units,
        passed=passed,
        failed=failed,
        undecided=undecided,
    )
