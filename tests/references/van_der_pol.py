"""Van der Pol oscillator x'' - mu (1 - x^2) x' + x = 0: orbit data and small-mu series.

Numbers of `TABLE`: a Taylor-series integration of the project at 34 digits; they agree
with the data set of P. Amore, arXiv:2111.12198 (2021).  Series: Lindstedt's expansion as
continued by Andersen and Geer, SIAM J. Appl. Math. 42 (1982) 678-693.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from references.orbit import Array, Orbit, settle, transient


@dataclass(frozen=True)
class Known:
    """Amplitude, period and natural logarithm of the Floquet multiplier of one orbit."""

    amplitude: float
    period: float
    log_multiplier: float


TABLE = {
    1.0: Known(2.00861986087484314, 6.66328685932313019, -7.05893280879896),
    5.0: Known(2.02150806156232132, 11.61223066771957, -85.4520185448835),
}


def frequency_series(mu: float) -> float:
    """Angular frequency; good to 1e-10 at mu = 0.2 and 1e-4 at mu = 1."""
    m = mu * mu
    return 1 - m / 16 + 17 * m**2 / 3072 + 35 * m**3 / 884736 - 678899 * m**4 / 5096079360


def amplitude_series(mu: float) -> float:
    """Largest x."""
    m = mu * mu
    return 2 + m / 96 - 1033 * m**2 / 552960 + 1019689 * m**3 / 55738368000


def orbit(mu: float) -> Orbit:
    """Settled orbit by scipy; state (x', x), phase x' rising through zero."""

    def slope(_t: float, y: Array) -> Array:
        return np.array([mu * (1 - y[1] ** 2) * y[0] - y[1], y[0]])

    pin = np.array([1.0, 0.0])
    start, period = transient(slope, np.array([0.0, 2.0]), 60.0, pin, rtol=1e-9)
    return settle(slope, start, period, pin, method="DOP853", rtol=1e-13)
