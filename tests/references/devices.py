"""Scalar device laws shared by the hand-written reference circuits.

Channel: i_d = k/2 [S(vgs - Vt)^2 - S(vgs - vds - Vt)^2], S(x) = s ln(1 + exp(x/s)),
after Enz, Krummenacher, Vittoz, Analog Integr. Circuits Signal Process. 8 (1995) 83-114.
"""

from __future__ import annotations

import math

from references.compiled import compiled


@compiled
def soft(x: float, s: float) -> float:
    """Smoothed ramp s ln(1 + exp(x/s)), written so that exp never overflows."""
    return max(x, 0.0) + s * math.log1p(math.exp(-abs(x) / s))


@compiled
def junction(c0: float, v: float, phi: float, m: float) -> float:
    """Junction capacitance C0/(1 + v/phi)^m under reverse voltage, C0 under forward voltage."""
    return c0 * math.pow(1.0 + max(v, 0.0) / phi, -m)
