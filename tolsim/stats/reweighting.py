"""Shares under another law: from units already drawn by weights, or from a few drawn anew.

A unit drawn under the densities p counts under the densities q with the weight prod q(x)/p(x)
(importance sampling; Kahn, Marshall, J. Oper. Res. Soc. Am. 1 (1953) 263-278).  Many factors
make a few units carry all the weight: the effective number of units, (sum w)^2 / sum w^2
(Kish, "Survey Sampling", 1965, section 11.7), says how many are left.  Then units are drawn
anew under q instead, few of them, and what is already known of all units is used as a control
variate: the share over all units of what is expected, plus the mean difference between what
was found and what was expected on the few.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import ndtri

from tolsim.stats.proportion import share_interval

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]

LEAST = 1e-9  # variance below which a share counts as exact; its interval then has `units` units


@dataclass(frozen=True)
class Estimate:
    """A share with its interval; `effective` is the number of plain units worth as much."""

    share: float
    low: float
    high: float
    effective: float


def effective_units(weights: ArrayLike) -> float:
    """Kish's effective number of units; 0 without any weight."""
    w = np.asarray(weights, float)
    squares = float(np.sum(w**2))
    return float(np.sum(w)) ** 2 / squares if squares > 0.0 else 0.0


def weighted_share(hit: ArrayLike, weights: ArrayLike, confidence: float = 0.95) -> Estimate:
    """Share of weighted units that are hit.

    The interval is that of Clopper and Pearson at the effective number of units, as Korn and
    Graubard (Survey Methodology 24 (1998) 193-201) do for weighted surveys: the smaller of
    Kish's and p (1 - p) / variance, the variance by the delta method for a ratio of sums.

    Parameters
    ----------
    hit : array_like (N,) of bool
    weights : array_like (N,)
        Not negative, not all zero.
    confidence : float
        Two-sided.
    """
    y, w = np.asarray(hit, float), np.asarray(weights, float)
    share = float(np.sum(w * y) / np.sum(w))
    variance = float(np.sum((w * (y - share)) ** 2) / np.sum(w) ** 2)
    effective = effective_units(w)
    if variance > LEAST:
        effective = min(effective, share * (1.0 - share) / variance)
    return _at(share, effective, confidence)


def corrected_share(
    expected: Estimate,
    few_expected: ArrayLike,
    few_found: ArrayLike,
    disagreement: float,
    confidence: float = 0.95,
) -> Estimate:
    """Share under another law, from what is expected of all units and found on a few.

    The estimate is expected + mean(few_found - few_expected): right on average whatever
    the expectation is worth, and sharp if it is good.  (Control variates: Hammersley, Handscomb,
    "Monte Carlo Methods", 1964, section 5.5.)  The interval joins that of the first
    term with a normal one of the second by the squares of their arms (Zou, Donner, Stat. Med. 27
    (2008) 1693-1702).

    Parameters
    ----------
    expected : Estimate
        Share of all units that would be hit under the other law, as far as is known.
    few_expected, few_found : array_like (m,)
        The same for some units (0 to 1), and what was found (0 or 1) when they were built under
        that law.
    disagreement : float
        Mean square by which finding and expectation differ, of this and similar laws: for the
        interval only, since a few units that happen to agree prove little.
    confidence : float
        Two-sided.
    """
    before, after = np.asarray(few_expected, float), np.asarray(few_found, float)
    share = expected.share + float((after - before).mean())
    arm = float(ndtri(0.5 + 0.5 * confidence)) * np.sqrt(disagreement / after.size)
    below = np.hypot(expected.share - expected.low, arm)
    above = np.hypot(expected.high - expected.share, arm)
    middle, bottom, top = np.clip([share, share - below, share + above], 0.0, 1.0).tolist()
    return Estimate(middle, bottom, top, expected.effective)


def _at(share: float, effective: float, confidence: float) -> Estimate:
    """The estimate with the exact binomial interval of so many units."""
    units = max(effective, 1.0)
    low, high = share_interval(share * units, units, confidence)
    return Estimate(share, float(low), float(high), effective)
