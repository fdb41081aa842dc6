"""Shares and percentiles of units that come in lots, so that lot-mates count for less.

Units of one lot share reels, so they fail together: 500 units in 50 lots tell less about the
share that fails than 500 units each from reels of their own.  How much less is the design effect
of Kish (Survey Sampling, 1965, section 5.4), 1 + (m - 1) rho for lots of m units with intra-class
correlation rho.  It is estimated from the scatter between lots of the ratio failed / units, and
turned into a number of independent units that would tell as much; the exact interval of Clopper
and Pearson for that number is the answer (Korn, Graubard, Survey Methodology 24 (1998) 193-201).

Two things differ from that paper, because failing lots are few here.  The degrees of freedom are
the lots of the rarer kind (with a failing unit, or with a passing one): lots without any failure
say little about how failures cluster.  And a run is never worth less than one unit per lot, what
it is worth when lots fail as a whole; where all units of a run agree, nothing else is known, so
that is what is taken.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import gammaln
from scipy.stats import beta, f, t

from tolsim.stats.percentiles import Percentiles
from tolsim.stats.proportion import check_confidence

Floats = NDArray[np.float64]
Labels = NDArray[np.intp]


@dataclass(frozen=True)
class LotShare:
    """A share counted over lots: its interval, and the independent units that tell as much."""

    share: float
    low: float
    high: float
    worth: float


def share_of_lots(
    hit: ArrayLike, lot: ArrayLike, confidence: float = 0.95, most: float | None = None
) -> LotShare:
    """Share of units with an interval that does not count lot-mates as independent.

    Parameters
    ----------
    hit : array_like (n,)
        1 or True for the units counted; numbers between 0 and 1 are shares of one.
    lot : array_like (n,)
        Lot of each unit, any labels.
    confidence : float
        Two-sided.
    most : float, optional
        What the readings may be worth at most; n unless each of them stands for several units.

    Raises
    ------
    ValueError
        If there are no units, the lengths differ or `confidence` is not in (0, 1).
    """
    check_confidence(confidence)
    given, group = np.asarray(hit, float), np.unique(np.asarray(lot), return_inverse=True)[1]
    if given.ndim != 1 or given.shape != group.shape or not given.size:
        raise ValueError(f"`hit` and `lot` must be (n,), n > 0 (got {given.shape}, {group.shape})")
    worth = units_worth(given, group, confidence, most)
    share = float(given.mean())
    return LotShare(share, *share_ends(share, worth, confidence), worth)


def units_worth(hit: Floats, group: Labels, confidence: float, most: float | None = None) -> float:
    """Independent units that would tell as much about the share as these do in their lots.

    Parameters
    ----------
    hit : ndarray (n,)
        0 .. 1.
    group : ndarray (n,)
        Lot of each unit, numbered from 0.
    most : float, optional
        As in `share_of_lots`.
    """
    n = hit.size
    most = float(n) if most is None else most
    sizes, hits = np.bincount(group).astype(float), np.bincount(group, hit)
    k = sizes.size
    if k == 1:
        return 0.0  # one lot says nothing about the next
    least = n * n / float(np.sum(sizes * sizes))
    share = float(hit.mean())
    rarer = int(min(np.sum(hits > 0.0), np.sum(hits < sizes)))
    if rarer == 0:
        return least
    between = k / (k - 1) * float(np.sum((hits - share * sizes) ** 2)) / n**2
    independent = min(share * (1.0 - share) / between, most) if between > 0.0 else most
    tail = 0.5 - 0.5 * confidence
    reach = t.isf(tail, most - 1) / t.isf(tail, min(rarer, k - 1))
    return float(np.clip(independent * reach**2, least, most))


def share_ends(share: float, worth: float, confidence: float) -> tuple[float, float]:
    """Interval of Clopper and Pearson for `share` of `worth` units, neither of them whole."""
    tail, hits = 0.5 - 0.5 * confidence, share * worth
    low = beta.ppf(tail, hits, worth - hits + 1.0) if hits > 0.0 else 0.0
    high = beta.isf(tail, hits + 1.0, worth - hits) if worth - hits > 0.0 else 1.0
    return float(low), float(high)


def percentiles_of_lots(
    values: ArrayLike, lot: ArrayLike, shares: tuple[float, ...], confidence: float = 0.95
) -> Percentiles:
    """Quantiles of units in lots: as `percentiles`, with intervals that know the lots.

    The interval of the share below the quantile is read back from the sorted sample (Woodruff,
    J. Am. Stat. Assoc. 47 (1952) 635-646).

    Parameters
    ----------
    values : array_like (n,)
        Readings; NaN and infinities count as missing.
    lot : array_like (n,)
    """
    check_confidence(confidence)
    given = np.asarray(values, float).ravel()
    finite = np.isfinite(given)
    known, missing = given[finite], int(np.sum(~finite))
    wanted = np.asarray(shares, float)
    if not known.size:
        empty = np.full(wanted.shape, np.nan)
        return Percentiles(tuple(shares), empty, empty - np.inf, empty + np.inf, 0, missing)
    group = np.unique(np.asarray(lot)[finite], return_inverse=True)[1]
    value = np.quantile(known, wanted, method="weibull")
    padded = np.concatenate([[-np.inf], np.sort(known), [np.inf]])
    low, high = np.empty(wanted.shape), np.empty(wanted.shape)
    for j, share in enumerate(wanted.tolist()):
        worth = units_worth((known <= value[j]).astype(float), group, confidence)
        low[j], high[j] = padded[list(_ranks(share, worth, known.size, confidence))]
    return Percentiles(tuple(shares), value, low, high, known.size, missing)


def tolerance_bound_of_lots(
    values: ArrayLike,
    lot: ArrayLike,
    coverage: float = 0.95,
    confidence: float = 0.95,
    side: Literal["high", "low"] = "high",
) -> float:
    """One-sided bound that `coverage` of all units respect, lot-mates not independent.

    As `tolerance_bound`; infinite when the lots are too few for it.
    """
    given = np.asarray(values, float).ravel()
    sign = 1.0 if side == "high" else -1.0
    finite = np.isfinite(given)
    known = sign * given[finite]
    if not known.size:
        return sign * float("inf")
    group = np.unique(np.asarray(lot)[finite], return_inverse=True)[1]
    two_sided = 2.0 * confidence - 1.0
    below = (known <= np.quantile(known, coverage, method="weibull")).astype(float)
    worth = units_worth(below, group, two_sided)
    rank = _ranks(coverage, worth, known.size, two_sided)[1]
    return sign * float(np.sort(known)[rank - 1]) if rank <= known.size else sign * float("inf")


def _ranks(share: float, worth: float, n: int, confidence: float) -> tuple[int, int]:
    """Ranks (1 .. n) between which a quantile lies; 0 and n + 1 where no reading will do.

    So many independent units all lie below the quantile with chance share^worth: if that is no
    rare event, none of them bounds it from above.
    """
    low, high = share_ends(share, worth, confidence)
    tail = 0.5 - 0.5 * confidence
    first = 0 if (1.0 - share) ** worth > tail else int(np.floor(low * n))
    last = n + 1 if share**worth > tail else min(int(np.floor(high * n)) + 1, n + 1)
    return first, last


@dataclass(frozen=True)
class BetweenLots:
    """Share of the variance that lies between lots (intra-class correlation), with interval."""

    share: float
    low: float
    high: float


def between_lots(values: ArrayLike, lot: ArrayLike, confidence: float = 0.95) -> BetweenLots:
    """Intra-class correlation from the analysis of variance of one classification.

    Estimator and interval: Searle, Linear Models (1971), chapter 9; the interval is exact for
    normal readings in lots of equal size, a guide otherwise.  NaN where it cannot be told.

    Parameters
    ----------
    values : array_like (n,)
        Readings; NaN and infinities are left out.
    lot : array_like (n,)
    """
    given = np.asarray(values, float).ravel()
    finite = np.isfinite(given)
    known, group = given[finite], np.unique(np.asarray(lot)[finite], return_inverse=True)[1]
    n = known.size
    sizes = np.bincount(group).astype(float)
    k = sizes.size
    if k < 2 or n <= k or np.ptp(known) == 0.0:  # noqa: PLR2004 - two lots to tell apart
        return BetweenLots(np.nan, np.nan, np.nan)
    known = known - known.mean()
    means = np.bincount(group, known) / sizes
    between = float(np.sum(sizes * means**2)) / (k - 1)
    within = float(np.sum((known - means[group]) ** 2)) / (n - k)
    if within == 0.0:
        return BetweenLots(1.0, 1.0, 1.0)
    size = (n - float(np.sum(sizes**2)) / n) / (k - 1)

    def share(ratio: float) -> float:
        return (ratio - 1.0) / (ratio + size - 1.0)

    ratio, tail = between / within, 0.5 - 0.5 * confidence
    least, most = ratio / f.isf(tail, k - 1, n - k), ratio / f.ppf(tail, k - 1, n - k)
    return BetweenLots(share(ratio), share(float(least)), share(float(most)))


def chance_in_batch(failed: ArrayLike, units: ArrayLike, boards: int) -> Floats:
    """Chance that `boards` units taken from one lot hold at least one that fails.

    1 - C(m - f, b) / C(m, b) for f failing of m units (hypergeometric): unbiased for every lot.

    Parameters
    ----------
    failed, units : array_like (k,)
        By lot.
    boards : int
        At most the smallest number of units in a lot.

    Returns
    -------
    ndarray (k,)
    """
    m, bad = np.asarray(units, float), np.asarray(failed, float)
    if np.any(m < boards) or boards < 1:
        raise ValueError("`boards` must lie between 1 and the units of every lot")
    good = m - bad

    def ways(of: Floats) -> Floats:  # log of C(of, boards)
        fits = np.maximum(of, boards)
        logs: Floats = gammaln(fits + 1.0) - gammaln(fits - boards + 1.0) - gammaln(boards + 1.0)
        return np.where(of >= boards, logs, -np.inf)

    return np.asarray(-np.expm1(ways(good) - ways(m)), np.float64)
