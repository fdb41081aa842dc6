"""Resistance and internal inductance of round copper wire at high frequency.

Skin effect is exact for a straight wire.  The proximity of neighbouring turns is an estimate:
R. G. Medhurst's measured ratios (Wireless Engineer 24, 1947, pp. 35-43 and 80-92, Table VIII;
values from memory, compared with a stored copy).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.constants import mu_0
from scipy.interpolate import PchipInterpolator
from scipy.special import jve

Floats = NDArray[np.float64]

COPPER = 1.724e-8 * (1.0 + 0.00393 * 5.0)  # ohm m at 25 degC (IEC 60028: 1.724e-8 at 20 degC)

# Rows: length over diameter of the coil; columns: wire diameter over pitch.
_SLENDERNESS = np.array([0.0, 0.2, 0.4, 0.6, 0.8, 1.0, 2.0, 4.0, 6.0, 8.0, 10.0, np.inf])
_FILLING = np.linspace(0.0, 1.0, 11)
# Two entries of circulating copies break the run of both row and column: 1.20 in the first row
# and 2.27 in the one before the last; 1.26 and 2.37 stand here.
_CROWDING = np.array(
    [
        [1, 1.02, 1.07, 1.16, 1.26, 1.44, 1.74, 2.12, 2.74, 3.73, 5.31],
        [1, 1.02, 1.08, 1.19, 1.29, 1.48, 1.77, 2.20, 2.83, 3.84, 5.45],
        [1, 1.03, 1.08, 1.21, 1.33, 1.54, 1.83, 2.28, 2.97, 3.99, 5.65],
        [1, 1.03, 1.10, 1.22, 1.38, 1.60, 1.89, 2.38, 3.10, 4.11, 5.80],
        [1, 1.03, 1.10, 1.23, 1.42, 1.64, 1.92, 2.44, 3.20, 4.17, 5.80],
        [1, 1.03, 1.10, 1.24, 1.45, 1.67, 1.94, 2.47, 3.17, 4.10, 5.55],
        [1, 1.04, 1.13, 1.28, 1.50, 1.74, 1.98, 2.32, 2.74, 3.36, 4.10],
        [1, 1.04, 1.15, 1.32, 1.54, 1.78, 2.01, 2.27, 2.60, 3.05, 3.54],
        [1, 1.04, 1.16, 1.34, 1.56, 1.80, 2.03, 2.29, 2.60, 2.92, 3.31],
        [1, 1.04, 1.165, 1.34, 1.57, 1.81, 2.08, 2.34, 2.62, 2.90, 3.20],
        [1, 1.04, 1.17, 1.35, 1.58, 1.83, 2.10, 2.37, 2.65, 2.93, 3.23],
        [1, 1.05, 1.19, 1.395, 1.65, 1.93, 2.22, 2.51, 2.815, 3.11, 3.41],
    ]
)


def skin_depth(frequency: ArrayLike, resistivity: float = COPPER) -> Floats:
    """Depth in m at which the current density of a flat conductor has fallen to 1/e."""
    return np.asarray(np.sqrt(resistivity / (np.pi * mu_0 * np.asarray(frequency, np.float64))))


def skin_effect(
    wire: ArrayLike, frequency: ArrayLike, resistivity: float = COPPER
) -> tuple[Floats, Floats]:
    """Resistance and internal inductance of a straight round wire, over their DC values.

    Z / R_dc = (k a / 2) J0(k a) / J1(k a) with k = (1 - j) / skin depth, a the radius (Kelvin;
    Ramo, Whinnery, Van Duzer, "Fields and Waves in Communication Electronics").

    Parameters
    ----------
    wire : array_like
        Diameter, m.
    frequency : array_like
        Hz, above zero.

    Returns
    -------
    resistance, inductance : ndarray
        At least 1, at most 1.
    """
    radii = np.asarray(wire, np.float64) / 2.0 / skin_depth(frequency, resistivity)
    ka = (1.0 - 1.0j) * radii
    impedance = 0.5 * ka * jve(0, ka) / jve(1, ka)
    # j omega L_dc / R_dc = j (a / depth)^2 / 4
    return np.asarray(impedance.real), np.asarray(4.0 * impedance.imag / radii**2)


def crowding(slenderness: ArrayLike, filling: ArrayLike) -> Floats:
    """Resistance of a long winding over that of its straightened wire, skin depth small.

    Parameters
    ----------
    slenderness : array_like
        Length over diameter of the coil.
    filling : array_like
        Wire diameter over pitch, 0 to 1.

    Returns
    -------
    ndarray
        Between the tabulated values; of the same shape.
    """
    slenderness, filling = np.broadcast_arrays(
        np.asarray(slenderness, np.float64), np.asarray(filling, np.float64)
    )
    rows = PchipInterpolator(_FILLING, _CROWDING, axis=1)(np.clip(filling, 0.0, 1.0))
    rows = np.moveaxis(rows, 0, -1)  # (..., 12)
    place = slenderness / (1.0 + slenderness)  # 0 to 1, so that the endless coil has a place
    marks = np.append(_SLENDERNESS[:-1] / (1.0 + _SLENDERNESS[:-1]), 1.0)
    upper = np.clip(np.searchsorted(marks, place), 1, len(marks) - 1)
    share = (place - marks[upper - 1]) / (marks[upper] - marks[upper - 1])
    low, high = (
        np.take_along_axis(rows, index[..., None], axis=-1)[..., 0] for index in (upper - 1, upper)
    )
    return np.asarray(low + share * (high - low))


def coil_resistance(
    turns: ArrayLike,
    diameter: ArrayLike,
    length: ArrayLike,
    wire: ArrayLike,
    frequency: float,
    leads: float = 0.0,
) -> Floats:
    """Resistance in ohm of a single-layer coil of copper wire at 25 degC.

    R = R_dc [ 1 + (F - 1) (1 + (Phi - 1) (N - 1) / N) ], F the skin effect and Phi the crowding:
    the turns at the ends have a neighbour on one side only, and where the skin effect is weak so
    is the proximity effect (common practice, no source).

    Parameters
    ----------
    turns, diameter, length, wire : array_like
        Number of turns; mean diameter, winding length and wire diameter in m.
    frequency : float
        Hz.
    leads : float
        Length of both straight leads together, m.
    """
    turns, diameter, length, wire = (
        np.asarray(value, np.float64) for value in (turns, diameter, length, wire)
    )
    per_metre = COPPER / (np.pi * wire**2 / 4.0)
    skin, _ = skin_effect(wire, frequency)
    beside = np.maximum(turns - 1.0, 0.0) / turns
    crowded = 1.0 + (crowding(length / diameter, wire * turns / length) - 1.0) * beside
    wound = np.hypot(turns * np.pi * diameter, length)
    return np.asarray(per_metre * (wound * (1.0 + (skin - 1.0) * crowded) + leads * skin))
