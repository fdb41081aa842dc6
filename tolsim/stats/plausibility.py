"""Could these readings come from the model?  A board beside the units the model predicts.

Every reading has its percentile among the predicted values, the meter's error folded in.  All
readings together are judged by their Mahalanobis distance from the predicted boards, and that
distance by its rank among as many boards simulated with errors of the meters (a Monte Carlo test;
Besag, Clifford, Biometrika 76 (1989) 633-642): mean and covariance are taken of the simulated and
the measured board together, so that under the model every rank is equally likely whatever the
shape of the distributions.  A board farther out than all of them is told by the chi-square law.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr
from scipy.stats import chi2

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]

LEAST_SHARE = 1e-9  # of the largest principal variance; smaller ones count as none


@dataclass(frozen=True)
class Plausibility:
    """Judgement of d readings against n predicted units.

    Attributes
    ----------
    percentile : ndarray (d,)
        Share of predicted readings below each reading.
    p : ndarray (d,)
        Two-sided, of each reading alone.
    z : ndarray (d,)
        Distance from the predicted mean in standard deviations of prediction and meter together.
    outside : ndarray (d,) of bool
        Farther from every predicted value than the expanded uncertainty (two deviations).
    share : ndarray (d,)
        By how much the squared distance falls without each reading.
    distance : float
        Mahalanobis, of all readings together.
    chi_square_p : float
        What the chi-square law would say of it.
    joint_p : float
        By rank among simulated boards; beyond all of them the smaller of 1 / (n + 1) and
        `chi_square_p`.
    """

    percentile: Floats
    p: Floats
    z: Floats
    outside: Flags
    share: Floats
    distance: float
    chi_square_p: float
    joint_p: float


def plausibility(
    predicted: Floats, reading: Floats, error: Floats, rng: np.random.Generator
) -> Plausibility:
    """Judge readings.

    Parameters
    ----------
    predicted : ndarray (n, d)
        Figures of n units, all finite.
    reading : ndarray (d,)
    error : ndarray (d,)
        Standard deviation of each meter.
    rng : numpy.random.Generator
        For the errors of the simulated boards.
    """
    n, d = predicted.shape
    percentile = _percentile(predicted, reading, error)
    tail = (n * np.minimum(percentile, 1.0 - percentile) + 0.5) / (n + 1.0)
    mean, covariance = predicted.mean(axis=0), np.cov(predicted.T, ddof=1).reshape(d, d)
    total = covariance + np.diag(error**2)
    deviation = np.sqrt(np.diag(total))
    away = reading - mean
    squared = _squared(away, total)
    rest = [_squared(np.delete(away, j), _without(total, j)) for j in range(d)]
    tail_p = float(chi2.sf(squared, d))
    boards = predicted + rng.standard_normal((n, d)) * error
    pool = np.vstack([reading, boards])
    among = _squared(pool - pool.mean(axis=0), np.cov(pool.T, ddof=1).reshape(d, d))
    beyond = int(np.sum(among[1:] >= among[0] * (1.0 - 1e-12)))
    rank_p = (1.0 + beyond) / (n + 1.0)
    return Plausibility(
        percentile=percentile,
        p=np.minimum(2.0 * tail, 1.0),
        z=np.divide(away, deviation, out=np.zeros(d), where=deviation > 0.0),
        outside=(reading - 2.0 * error > predicted.max(axis=0))
        | (reading + 2.0 * error < predicted.min(axis=0)),
        share=squared - np.array(rest, np.float64).reshape(d),
        distance=float(np.sqrt(squared)),
        chi_square_p=tail_p,
        joint_p=rank_p if beyond else min(rank_p, tail_p),
    )


def _percentile(predicted: Floats, reading: Floats, error: Floats) -> Floats:
    """P(value + error of the meter <= reading), over units; ties count half."""
    found = np.empty(reading.size)
    for j in range(reading.size):
        gap = reading[j] - predicted[:, j]
        below = ndtr(gap / error[j]) if error[j] > 0.0 else 0.5 * (1.0 + np.sign(gap))
        found[j] = float(np.mean(below))
    return found


def _without(matrix: Floats, j: int) -> Floats:
    return np.delete(np.delete(matrix, j, axis=0), j, axis=1)


def _squared(away: Floats, covariance: Floats) -> Floats:
    """Squared Mahalanobis distance of (d,) or (n, d) deviations; 0 for d = 0.

    Readings that hang together without any scatter of their own (their variance is a rounding
    error) are compared only along what scatters.
    """
    scale = np.sqrt(np.diag(covariance))
    scale = np.where(scale > 0.0, scale, 1.0)
    if not scale.size:
        return np.zeros(away.shape[:-1])
    size, axes = np.linalg.eigh(covariance / np.outer(scale, scale))
    kept = size > LEAST_SHARE * max(float(size[-1]), 1e-300)
    along = (away / scale) @ axes[:, kept]
    return np.asarray((along**2 / size[kept]).sum(axis=-1), np.float64)
