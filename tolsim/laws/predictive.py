"""Readings of some pieces to the law of the next one: nothing is drawn, everything is stated.

The mean and scatter of the reel are unknown and the prior is flat in the mean and in the
logarithm of the scatter; then the next piece follows Student's t with n - 1 degrees of
freedom about the mean of the readings, with scale s sqrt(1 + 1/n): Gelman, Carlin, Stern,
Dunson, Vehtari, Rubin, "Bayesian Data Analysis" (3rd ed. 2013), section 3.2.
"""

from __future__ import annotations

import math
from typing import Final, Literal

import numpy as np
from numpy.typing import NDArray
from scipy.special import chdtr
from scipy.stats import chi2, norm

from tolsim.errors import Mistake
from tolsim.laws import Law, NormalMixture, StudentT
from tolsim.laws.measured import Exponential, Measured, Sample
from tolsim.stats.sample_shape import FEWEST, cut_ends, hollow_middle, normal_fit

Floats = NDArray[np.float64]
Shape = Literal["auto", "normal", "lognormal", "as measured"]
SHAPES: Final = ("auto", "normal", "lognormal", "as measured")

LEAST_PIECES = 5  # readings; fewer tell next to nothing about scatter
FEW_PIECES = 10
ENOUGH_FOR_SHAPE = 20  # readings, from which on they may have a shape of their own
GOOD_FIT = 0.05  # a normal shape is kept if chance fits worse this often
OUTSIDE = 20.0  # 1 / (20 n) of the pieces lie beyond each end of the law
MOST_HUMPS = 200
LEAST_NOISE_SHARE = 1e-3  # of samples whose scatter would be so small beside the meter noise
_WIDTHS: Final = np.geomspace(0.05, 1.2, 33)  # kernel widths tried, in standard deviations


def next_piece(
    readings: Floats,
    *,
    shape: Shape = "auto",
    noise: float = 0.0,
    low: float | None = None,
    high: float | None = None,
    origin: float | None = None,
    file: str = "",
    test_frequency: float | None = None,
) -> Measured:
    """Law of one more piece of the reel that `readings` come from.

    Parameters
    ----------
    readings : ndarray (n,)
        Deviations or values, one per piece.
    shape : str
        "auto" takes the normal one if it fits, else the lognormal one, else the readings
        themselves, smoothed.
    noise : float
        Standard deviation of one reading of the meter; its square is taken out of the scatter.
    low, high : float, optional
        Limits to which the maker sorts.  Otherwise the law ends where it leaves a share of
        1 / (20 n) outside: n pieces cannot speak of rarer ones.
    origin : float, optional
        Value below which nothing exists (-1 for relative deviations); a lognormal shape is
        about it.
    file, test_frequency
        Kept in the sample.

    Raises
    ------
    Mistake
        If the readings are too few, all equal, outside the limits, or contradict the noise.
    """
    x = np.sort(np.asarray(readings, dtype=np.float64))
    spread = float(np.std(x, ddof=1)) if x.size > 1 else 0.0
    _check(x, spread, noise, low, high)
    chosen, fit_p, remarks = _shape(x, shape, origin)
    end = 1.0 / (OUTSIDE * x.size)
    if chosen == "lognormal" and origin is not None:
        ratio = x - origin
        relative_noise = noise / float(np.mean(ratio))
        ends = [None if e is None else math.log(max(e - origin, 1e-12)) for e in (low, high)]
        logs = np.log(ratio)
        law: Law = Exponential(_normal(logs, relative_noise, ends[0], ends[1], end), origin)
    elif chosen == "normal":
        law = _normal(x, noise, low, high, end, origin)
    else:
        law = _as_measured(x, noise, low, high, end, origin)
    sample = Sample(
        file,
        x.size,
        float(np.mean(x)),
        spread,
        noise,
        chosen,
        fit_p,
        tuple(x.tolist()),
        remarks,
        test_frequency,
    )
    return Measured(law, sample)


def _check(x: Floats, spread: float, noise: float, low: float | None, high: float | None) -> None:
    """Refuse readings that cannot make a law."""
    if x.size < LEAST_PIECES:
        raise Mistake(
            f"at least {LEAST_PIECES} readings", "Measure more pieces.", "file", f"{x.size}"
        )
    if not spread > 0.0:
        cure = "The meter shows too few digits to see the scatter: state it as another law."
        raise Mistake("readings that differ", cure, "file", f"{x.size} equal ones")
    if noise > 0.0:
        seen = (x.size - 1) * spread**2 / noise**2
        if chdtr(x.size - 1, seen) < LEAST_NOISE_SHARE:
            raise Mistake(
                "less noise than the readings scatter",
                "The readings themselves show that the meter is steadier.",
                "meter_noise",
                f"{noise:.3g} beside a scatter of {spread:.3g}",
            )
    for key, end, outside in (("low", low, low is not None and x[0] < low),
                              ("high", high, high is not None and x[-1] > high)):  # fmt: skip
        if outside:
            seen = x[0] if key == "low" else x[-1]
            cure = "Pieces outside cannot come from a reel sorted to these limits."
            raise Mistake("limits around all readings", cure, key, f"{end:.4g}, a piece {seen:.4g}")


def _shape(x: Floats, asked: Shape, origin: float | None) -> tuple[str, float, tuple[str, ...]]:
    """Shape to take, how well it fits (NaN if too few), and what the readings look like."""
    remarks: list[str] = []
    if x.size < FEW_PIECES:
        remarks.append("few pieces: the law is wide because little is known")
    if x.size < FEWEST:
        return ("normal" if asked == "auto" else asked), math.nan, tuple(remarks)
    p = normal_fit(x).p
    p_log = math.nan if origin is None else normal_fit(np.log(x - origin)).p
    hollow = hollow_middle(x)
    ends = cut_ends(x)
    if hollow:
        remarks.append("hollow middle: a tighter grade was sorted out, or the reel mixes two lots")
    elif ends:
        remarks.append(
            f"cut at the {' and '.join(ends)} end: sorted to limits, state them as low and high"
        )
    chosen: str = asked
    if asked == "auto":
        chosen = "normal"
        if (p < GOOD_FIT or hollow) and x.size >= ENOUGH_FOR_SHAPE:
            chosen = "lognormal" if p_log >= GOOD_FIT and not hollow else "as measured"
    fit = p_log if chosen == "lognormal" else p
    if chosen != "as measured" and fit < GOOD_FIT:
        remarks.append(f"a {chosen} shape does not fit well")
    return chosen, fit, tuple(remarks)


def _normal(
    x: Floats,
    noise: float,
    low: float | None,
    high: float | None,
    end: float,
    origin: float | None = None,
) -> Law:
    """Student's t, or with meter noise the mixture it becomes.

    With noise of known sd, the variance v of readings has the same posterior, cut at v =
    noise^2; given v, the next piece is normal with variance v / n (of the mean) plus
    v - noise^2 (of the piece).
    """
    n, centre, spread = x.size, float(np.mean(x)), float(np.std(x, ddof=1))
    if noise == 0.0:
        scale = spread * math.sqrt(1.0 + 1.0 / n)
        whole = StudentT(centre - 1e6 * scale, centre + 1e6 * scale, centre, scale, n - 1.0)
        ends = _ends(whole, end, low, high, origin)
        return StudentT(*ends, centre, scale, n - 1.0)
    most = chdtr(n - 1, (n - 1) * spread**2 / noise**2)
    share = (np.arange(MOST_HUMPS) + 0.5) / MOST_HUMPS * most
    v = (n - 1) * spread**2 / chi2.ppf(share, n - 1)
    sigmas = np.sqrt(v / n + np.maximum(v - noise**2, 0.0))
    return _cut((centre,) * MOST_HUMPS, sigmas, end, low, high, origin)


def _as_measured(
    x: Floats,
    noise: float,
    low: float | None,
    high: float | None,
    end: float,
    origin: float | None,
) -> Law:
    """The readings as humps, widened to what so few of them leave open.

    Smoothed bootstrap (Silverman, Young, Biometrika 74 (1987) 469-479): humps of width h on
    the readings, all drawn together or apart so that the variance is that of the Student law
    for as many readings, (s^2 - noise^2 + s^2 / n) (n - 1) / (n - 3).  The width maximises
    the likelihood of each reading under the humps of all others (Habbema, Hermans, van den
    Broek 1974; Duin 1976).
    """
    n, centre, spread = x.size, float(np.mean(x)), float(np.std(x, ddof=1))
    own = max(spread**2 - noise**2, 0.01 * spread**2)
    wanted = (own + spread**2 / n) * (n - 1) / (n - 3)
    if n > MOST_HUMPS:
        x = np.quantile(x, (np.arange(MOST_HUMPS) + 0.5) / MOST_HUMPS)
    width = spread * kernel_width((x - centre) / spread)
    stretch = math.sqrt(wanted / (float(np.var(x)) + width**2))
    humps = centre + stretch * (x - float(np.mean(x)))
    return _cut(tuple(humps.tolist()), np.full(x.size, stretch * width), end, low, high, origin)


def kernel_width(x: Floats) -> float:
    """Width of normal humps on the standardised readings `x`, by left-out likelihood."""
    distance = x[:, None] - x[None, :]
    best, found = -math.inf, float(_WIDTHS[-1])
    for width in _WIDTHS:
        density = norm.pdf(distance / width) / width
        np.fill_diagonal(density, 0.0)
        likelihood = float(np.sum(np.log(np.maximum(density.mean(axis=1), 1e-300))))
        if likelihood > best:
            best, found = likelihood, float(width)
    return found


def _cut(
    centres: tuple[float, ...],
    sigmas: Floats,
    end: float,
    low: float | None,
    high: float | None,
    origin: float | None,
) -> Law:
    """Mixture between its limits."""
    far = 9.0 * float(np.max(sigmas))
    widths = tuple(sigmas.tolist())
    whole = NormalMixture(min(centres) - far, max(centres) + far, centres, widths)
    return NormalMixture(*_ends(whole, end, low, high, origin), centres, widths)


def _ends(
    whole: Law, end: float, low: float | None, high: float | None, origin: float | None
) -> tuple[float, float]:
    """Limits as stated, else where the law leaves the share `end` outside."""
    least, most = (float(value) for value in whole.ppf([end, 1.0 - end]))
    if origin is not None:  # nothing below a hundredth of the nominal value
        least = max(least, origin + 0.01)
    return (least if low is None else low), (most if high is None else high)
