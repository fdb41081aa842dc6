"""How figures answer to factors, fitted on solved units: what a unit would show a little aside.

Each figure is taken as linear in the factors, fitted by ridge regression over all units with the
penalty of least generalised cross-validation (Golub, Heath, Wahba, Technometrics 21 (1979)
215-223), which also serves when there are more factors than units.  The fit never replaces a
unit: it only says how far the unit's own figure moves when its factors are moved, so that it is
exact where they stay, and small errors of the fit stay small.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

FEWEST_UNITS = 20  # below, a fit is mostly noise
PENALTIES = np.logspace(-10.0, 1.0, 45)  # of the largest singular value squared


def moved(figures: Floats, factors: Floats, changed: Floats) -> Floats:
    """Figures of the same units with their factors changed.

    Parameters
    ----------
    figures : ndarray (N, f)
        NaN where a unit has none: it keeps none, and does not take part in the fit.
    factors, changed : ndarray (N, k)
        Values as drawn and as they would be.

    Returns
    -------
    ndarray (N, f)
        figures + (changed - factors) slopes; unchanged where fewer than `FEWEST_UNITS` have one.
    """
    scale = factors.std(axis=0)
    scale = np.where(scale > 0.0, scale, 1.0)
    step = (changed - factors) / scale
    result = figures.copy()
    known = np.isfinite(figures)
    for pattern in np.unique(known, axis=1).T:  # columns that miss the same units share a fit
        if pattern.sum() >= FEWEST_UNITS:
            columns = np.flatnonzero((known == pattern[:, None]).all(axis=0))
            result[:, columns] += step @ slopes(
                factors[pattern] / scale, figures[pattern][:, columns]
            )
    return result


def slopes(x: Floats, y: Floats) -> Floats:
    """Slopes (k, f) of y (n, f) against x (n, k), by ridge regression."""
    centred, target = x - x.mean(axis=0), y - y.mean(axis=0)
    left, size, right = np.linalg.svd(centred, full_matrices=False)
    kept = size > size[0] * 1e-12 if size.size else size > 0.0
    left, size, right = left[:, kept], size[kept], right[kept]
    if not size.size:
        return np.zeros((x.shape[1], y.shape[1]))
    along = left.T @ target  # (r, f)
    keep = size**2 / (size**2 + PENALTIES[:, None] * size[0] ** 2)  # (p, r)
    outside = (target**2).sum(axis=0) - (along**2).sum(axis=0)
    lost = outside + (1.0 - keep) ** 2 @ along**2  # (p, f) residual squares
    freedom = np.maximum(1.0 - (1.0 + keep.sum(axis=1)) / len(x), 1e-6)
    best = np.argmin(lost / freedom[:, None] ** 2, axis=0)
    found: Floats = right.T @ ((keep[best].T / size[:, None]) * along)
    return found
