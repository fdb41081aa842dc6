"""Inductance of single-layer air coils: current sheet, and its corrections for round wire."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.constants import mu_0
from scipy.special import ellipe, elliprd

from tolsim.errors import Mistake

SERIES_FROM = 10  # strip widths: beyond, the closed form loses digits


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

    The wire is taken as a thin current sheet of mean diameter `diameter`;
    `round_wire_inductance` corrects that.

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


def round_wire_inductance(
    turns: ArrayLike,
    diameter: ArrayLike,
    length: ArrayLike,
    wire: ArrayLike,
    internal: ArrayLike = 0.0,
) -> NDArray[np.float64]:
    """Inductance in H of a single-layer coil of round wire.

    L = L_sheet - mu0 (D / 2) N (k_s + k_m), with k_s = 3/2 - Y - ln(2 p / d) for the turns
    themselves, p the pitch, and k_m for the turns on each other (E. B. Rosa, Bull. Bureau of
    Standards 2, 1906, 161-187; F. W. Grover, "Inductance Calculations", 1946, ch. 16).  Rosa's
    5/4 is 3/2 - Y at direct current.

    Parameters
    ----------
    turns, diameter, length, wire : array_like
        Number of turns; mean diameter, winding length (turns times pitch) and wire diameter, m.
    internal : array_like
        Y, a quarter of the internal inductance over its value at direct current: 1/4 at low
        frequency, 0 where all current flows in the skin.
    """
    turns, diameter, length, wire = (
        np.asarray(value, dtype=np.float64) for value in (turns, diameter, length, wire)
    )
    own = 1.5 - np.asarray(internal) - np.log(2.0 * length / turns / wire)
    gap = mu_0 * diameter / 2.0 * turns * (own + mutual_correction(turns))
    return np.asarray(air_coil_inductance(turns, diameter, length) - gap)


def mutual_correction(turns: ArrayLike) -> NDArray[np.float64]:
    """Rosa's k_m (his B): wires at a distance act otherwise than strips of a sheet.

    k_m = (2 / N) sum_n (N - n) g_n, with g_n = -ln of the mean geometric distance of two strips
    in line over the distance n of their centres.  Between whole numbers N k_m is joined by
    straight lines; below two turns it is zero.
    """
    turns = np.asarray(turns, dtype=np.float64)
    count = max(int(np.ceil(np.max(turns))), 2)
    whole = np.arange(1, count + 1)
    between = np.cumsum(_strip_gap(whole[:-1]))  # sum of g_1 ... g_n
    total = 2.0 * np.concatenate([[0.0], np.cumsum(between)])  # N k_m at N = 1 ... count
    return np.asarray(np.interp(turns, whole, total) / turns)


def _strip_gap(steps: NDArray[np.int_]) -> NDArray[np.float64]:
    """Minus ln of the mean geometric distance of two strips `steps` widths apart, over steps."""
    n = steps.astype(np.float64)
    near = n < SERIES_FROM
    below = np.where(near & (n > 1), n - 1.0, 1.0)  # (n - 1)^2 ln(n - 1) is 0 at n = 1
    exact = (
        1.5
        + n**2 * np.log(n)
        + np.log(n)
        - 0.5 * ((n + 1.0) ** 2 * np.log(n + 1.0) + (n - 1.0) ** 2 * np.log(below))
    )
    series = 1.0 / (12.0 * n**2) + 1.0 / (60.0 * n**4) + 1.0 / (168.0 * n**6) + 1.0 / (360.0 * n**8)
    return np.where(near, exact, series)


def lead_inductance(leads: float, wire: ArrayLike, internal: ArrayLike) -> NDArray[np.float64]:
    """Inductance in H of two straight leads, `leads` m together, not coupled to each other.

    Each: mu0 l / (2 pi) [ ln(4 l / d) - 1 + Y ] (E. B. Rosa, Bull. Bureau of Standards 4, 1908).
    """
    each = leads / 2.0
    bracket = np.log(4.0 * each / np.asarray(wire, dtype=np.float64)) - 1.0 + np.asarray(internal)
    return np.asarray(2.0 * mu_0 * each / (2.0 * np.pi) * np.maximum(bracket, 0.0))
