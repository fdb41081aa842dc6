"""How much of the variance of repeated readings lies between units: one-way analysis of variance.

Estimator of the variance components by expected mean squares (Searle, Casella, McCulloch, Variance
Components, 1992, section 3.5); a negative component is taken as 0.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike


def share_between(readings: ArrayLike) -> float | None:
    """Share of the variance that lies between units.

    Parameters
    ----------
    readings : (N, T)
        T readings of each of N units.

    Returns
    -------
    float or None
        None for fewer than two units or readings, or where nothing varies.
    """
    y = np.asarray(readings, dtype=np.float64)
    units, tries = y.shape
    if min(units, tries) < 2:  # noqa: PLR2004 - no spread of one
        return None
    within = float(np.mean(np.var(y, axis=1, ddof=1)))
    between = max(float(np.var(y.mean(axis=1), ddof=1)) - within / tries, 0.0)
    total = between + within
    return None if total == 0.0 else between / total
