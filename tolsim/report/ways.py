"""A voltage along a change of load, as the report draws it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Way:
    """One voltage of one unit along a change of load.

    Attributes
    ----------
    change, quantity, unit : str
        "full to dark", "Q1 drain", "nominal unit" or "unit 17".
    time, low, high : ndarray (windows,)
        s after the beginning of the change; V.
    rating : float or None
        V.
    """

    change: str
    quantity: str
    unit: str
    time: Floats
    low: Floats
    high: Floats
    rating: float | None
