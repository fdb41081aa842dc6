"""Inductance of single-layer air coils as a current sheet."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.constants import mu_0
from scipy.special import ellipe, elliprd

from tolsim.errors import Mistake


def nagaoka(ratio: ArrayLike) -> NDArray[np.float64]:
    """Nagaoka's coefficient of a current sheet with `ratio` = diameter / length.

    With k^2 = D^2 / (D^2 + l^2):  K = 4 / (3 pi k') [ k'^2 (K(k) - E(k)) / k^2 + E(k) - k ]
    (Lorenz 1879; Nagaoka 1909).  (K - E) / k^2 = R_D(0, k'^2, 1) / 3 is Carlson's form,
    which keeps its digits for long coils where K and E come close.

    Parameters
    ----------
    ratio : array_like
        Above zero, any shape.

    Returns
    -------
    ndarray
        Same shape; 1 for an infinitely long coil.
    """
    ratio = np.asarray(ratio, dtype=np.float64)
    square = ratio**2 / (1.0 + ratio**2)
    rest = 1.0 / (1.0 + ratio**2)
    bracket = rest * elliprd(0.0, rest, 1.0) / 3.0 + ellipe(square) - np.sqrt(square)
    return np.asarray(4.0 / (3.0 * np.pi * np.sqrt(rest)) * bracket)


def air_coil_inductance(
    turns: ArrayLike, diameter: ArrayLike, length: ArrayLike
) -> NDArray[np.float64]:
    """Inductance in H of a single-layer air coil: L = mu0 pi D^2 N^2 K / (4 l).

    The wire is taken as a thin current sheet of mean diameter `diameter`; the separate
    corrections for round wire (Rosa, Grover) are left out.

    Parameters
    ----------
    turns, diameter, length : array_like
        Number of turns; mean diameter and winding length in m.  Broadcast together.

    Raises
    ------
    Mistake
        If any of them is not above zero.
    """
    for name, value in (("turns", turns), ("diameter", diameter), ("length", length)):
        if not np.min(value) > 0.0:
            raise Mistake("a number above 0", key=name, got=f"{np.min(value):g}")
    turns, diameter, length = (
        np.asarray(value, dtype=np.float64) for value in (turns, diameter, length)
    )
    shape = nagaoka(diameter / length)
    return np.asarray(mu_0 * np.pi * diameter**2 * turns**2 * shape / (4.0 * length))
