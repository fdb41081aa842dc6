"""Current-mode push-pull stage with ideal switches, in closed form.

Kobayashi, Hinrichs, Asbeck, "Current-mode class-D power amplifiers for high-efficiency
RF applications", IEEE Trans. Microwave Theory Tech. 49 (2001) 2480-2485, gives the
limit of high Q: drain peak pi V, power pi^2 V^2 / (2 R).

At finite Q = R / (w0 L) the self-oscillating stage is a relay: a constant current
changes sign whenever the tank voltage does.  Between the changes the tank rings freely,
v = (s / wd) exp(-a t) sin(wd t) with a = w0 / (2 Q) and wd^2 = w0^2 - a^2, so half a
period is pi / wd exactly; the mean drain voltage V fixes s.  (Derivation of the project.)
"""

from __future__ import annotations

from dataclasses import dataclass
from math import atan, exp, inf, pi, sqrt


@dataclass(frozen=True)
class Relay:
    """Frequency over 1/(2 pi sqrt(L C)), drain peak over V, power times R over V^2."""

    frequency: float
    peak: float
    power: float


def relay(q: float) -> Relay:
    """Ideal relay stage with tank quality factor `q` > 1/2 (infinite allowed)."""
    if q == inf:
        return Relay(1.0, pi, pi**2 / 2)
    a = 1 / (2 * q)
    wd = sqrt(1 - a * a)
    decay = exp(-a * pi / wd)  # of the tank voltage over half a period
    top = atan(wd / a) / wd  # instant of the peak
    return Relay(
        frequency=wd,
        peak=2 * pi / wd * exp(-a * top) / (1 + decay),
        power=pi * (1 - decay) / (a * wd * (1 + decay)),
    )


# Ripple of the feed current, peak to peak, in units of V / (w L): ideal half-sine drains.
RIPPLE_TWO_CHOKES = 3.462676
RIPPLE_CENTRE_TAP = 0.661348
