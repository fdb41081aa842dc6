"""When the textbook oscillators start: characteristic polynomials and critical gains.

Small-signal stages with a transconductance g_m and no other device effects, as derived
in any text on oscillators (for instance Clarke and Hess, Communication Circuits, 1971,
chapter 6).  The roots decide: a complex pair with positive real part grows.
"""

from __future__ import annotations

import numpy as np


def colpitts(gm: float, coil: float, c1: float, c2: float, load: float) -> complex:
    """Oscillating root, 1/s.  C1 drain-source, C2 gate-source, coil drain-gate, R at the drain.

    s^3 L C1 C2 + s^2 L C2 / R + s (C1 + C2) + (g_m + 1/R) = 0; critical g_m R = C2 / C1.
    """
    return _ringing([coil * c1 * c2, coil * c2 / load, c1 + c2, gm + 1 / load])


def colpitts_lossy_coil(gm: float, coil: float, c1: float, c2: float, r: float) -> complex:
    """The same with series resistance r in the coil instead: critical g_m = r (C1 + C2) / L."""
    return _ringing([coil * c1 * c2, r * c1 * c2, c1 + c2, gm])


def hartley(gm: float, l1: float, l2: float, capacitor: float, load: float) -> complex:
    """Oscillating root.  L1 drain-source, L2 gate-source (uncoupled), C drain-gate, R at the drain.

    s^3 L1 L2 C (g_m + 1/R) + s^2 C (L1 + L2) + s L1 / R + 1 = 0; critical g_m R = L1 / L2.
    """
    return _ringing([l1 * l2 * capacitor * (gm + 1 / load), capacitor * (l1 + l2), l1 / load, 1.0])


def cross_coupled(gm: float, coil: float, capacitor: float, load: float) -> complex:
    """Oscillating root of a cross-coupled pair, parallel tank L, C, R: critical g_m R = 2."""
    return _ringing([coil * capacitor, coil * (1 / load - gm / 2), 1.0])


def _ringing(polynomial: list[float]) -> complex:
    # Roots of a polynomial scaled to powers of the mean root: well conditioned for RF values.
    degree = len(polynomial) - 1
    size = (polynomial[-1] / polynomial[0]) ** (1 / degree)
    scaled = [c * size ** (degree - k) for k, c in enumerate(polynomial)]
    roots = np.roots(scaled) * size
    return complex(roots[np.argmax(roots.imag)])
