"""What a small sample looks like: normal or not, cut at its ends, hollow in the middle.

Nothing here is drawn by chance: critical values are tables.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import log_ndtr
from scipy.stats import binom

Floats = NDArray[np.float64]

FEWEST = 8  # readings, below which neither a fit nor a cut can be judged
_LOPSIDED: Final = 1.4  # ends that differ by less are taken as alike
ALPHA = 0.01  # a hollow middle is told if chance makes one this rarely
_FARTHEST_A2: Final = 13.0  # the fitted p formula turns up beyond; p is below 1e-23 there

# Lower 0.5 % points under the normal law, by simulation of 60 000 to 400 000 samples of each
# size (tests/test_sample_shape.py repeats some).  The range column agrees with the lower
# points of David, Hartley, Pearson, Biometrika 41 (1954) 482-493.
_SIZES: Final = (8, 10, 12, 15, 20, 25, 30, 40, 50, 70, 100, 150, 200, 300, 500)
_LEAST_RANGE: Final = (
    2.306, 2.461, 2.578, 2.732, 2.930, 3.082, 3.204, 3.397, 3.552, 3.781, 4.021, 4.286, 4.473,
    4.739, 5.073,
)  # fmt: skip
_LEAST_REACH: Final = (
    0.798, 0.886, 0.953, 1.043, 1.157, 1.248, 1.320, 1.431, 1.519, 1.650, 1.785, 1.935, 2.040,
    2.176, 2.360,
)  # fmt: skip


@dataclass(frozen=True)
class Fit:
    """Anderson-Darling distance to the normal law of the sample's own mean and scatter.

    `p` is the probability of a larger distance by chance.
    """

    distance: float
    p: float


def normal_fit(values: ArrayLike) -> Fit:
    """How well a normal law fits, mean and scatter taken from the sample.

    A2 = -n - (1/n) sum (2i - 1) [ln F(x_i) + ln(1 - F(x_(n+1-i)))], times the correction
    1 + 0.75/n + 2.25/n^2 for small samples; p by the formulas fitted to its law: D'Agostino,
    Stephens, "Goodness-of-fit techniques" (1986), section 4.8.5, table 4.9.

    Parameters
    ----------
    values : array_like (n,)
        At least `FEWEST` values that are not all equal.
    """
    x = np.sort(np.asarray(values, dtype=np.float64))
    n = x.size
    z = (x - x.mean()) / x.std(ddof=1)
    weights = 2.0 * np.arange(1, n + 1) - 1.0
    distance = float(-n - np.sum(weights * (log_ndtr(z) + log_ndtr(-z[::-1]))) / n)
    a = min(distance * (1.0 + 0.75 / n + 2.25 / n**2), _FARTHEST_A2)
    if a < 0.2:  # noqa: PLR2004 - the four pieces of table 4.9
        p = -math.expm1(-13.436 + 101.14 * a - 223.73 * a**2)
    elif a < 0.34:  # noqa: PLR2004
        p = -math.expm1(-8.318 + 42.796 * a - 59.938 * a**2)
    elif a < 0.6:  # noqa: PLR2004
        p = math.exp(0.9177 - 4.279 * a - 1.38 * a**2)
    else:
        p = math.exp(1.2937 - 5.709 * a + 0.0186 * a**2)
    return Fit(distance, min(max(p, 0.0), 1.0))


def cut_ends(values: ArrayLike) -> tuple[str, ...]:
    """Ends at which a sample looks cut off: () or some of "lower", "upper".

    A normal sample of n values reaches out at least so many standard deviations, but for one
    in two hundred: its whole range (David, Hartley, Pearson 1954), and each end from the
    mean.  A range too short means that both ends are cut, unless one reaches much further
    than the other; a reach too short means that this end is.

    Parameters
    ----------
    values : array_like (n,)
        Fewer than `FEWEST` give no answer.
    """
    x = np.asarray(values, dtype=np.float64)
    spread = x.std(ddof=1) if x.size >= FEWEST else 0.0
    if not spread > 0.0:
        return ()
    log_size = math.log(min(x.size, _SIZES[-1]))
    sizes = np.log(_SIZES)
    ends = {"lower": (x.mean() - x.min()) / spread, "upper": (x.max() - x.mean()) / spread}
    least = np.interp(log_size, sizes, _LEAST_REACH)
    short = tuple(name for name, reach in ends.items() if reach < least)
    if np.ptp(x) / spread < np.interp(log_size, sizes, _LEAST_RANGE):
        shorter = min(ends, key=lambda name: ends[name])
        alike = max(ends.values()) < _LOPSIDED * ends[shorter]
        return ("lower", "upper") if alike else (shorter,)
    return short


def hollow_middle(values: ArrayLike) -> bool:
    """True if the middle third of the range holds significantly less than either outer third.

    No law with one hump does that, so the pieces of the middle are missing: a tighter grade
    was sorted out, or two lots lie on the reel.  Each comparison is a sign test.

    Parameters
    ----------
    values : array_like (n,)
    """
    x = np.asarray(values, dtype=np.float64)
    width = np.ptp(x)
    if x.size < FEWEST or not width > 0.0:
        return False
    third = np.clip(((x - x.min()) / width * 3.0).astype(np.intp), 0, 2)
    low, middle, high = np.bincount(third, minlength=3)
    return all(binom.cdf(middle, middle + side, 0.5) < ALPHA for side in (low, high))
