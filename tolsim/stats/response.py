"""How figures answer to factors, fitted on solved units: what a unit would show a little aside.

Each figure is taken as a sum of lines in the factors, bent for those it hangs on most, fitted by
ridge regression over all units with the penalty of least generalised cross-validation (Golub,
Heath, Wahba, Technometrics 21 (1979) 215-223), which also serves when there are more factors than
units.  The fit never replaces a unit: it only says how far the unit's own figure moves when its
factors are moved, so that it is exact where they stay.

Whether a limit is kept hangs on the order of the units only, so limits are judged in normal
scores (van der Waerden, 1952), where no outlier pulls the fit.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtri
from scipy.stats import rankdata

Floats = NDArray[np.float64]

FEWEST_UNITS = 20  # below, a fit is mostly noise
BINS = 8  # of equal count, in which a factor shows what hangs on it
MOST_BENT = 2  # factors per figure whose line may bend
KNOTS = (0.125, 0.25, 0.5, 0.75, 0.875)
PENALTIES = np.logspace(-10.0, 1.0, 45)  # of the largest singular value squared


def normal_scores(values: Floats, marks: Floats) -> tuple[Floats, Floats]:
    """Normal scores of values by their rank, and where marks stand among them.

    Parameters
    ----------
    values : ndarray (N,)
        NaN where a unit has none: it gets none.
    marks : ndarray (m,)
        Between two values a mark lies between their scores; beyond all of them as many scores
        away as it is standard deviations away.  Infinite marks stay so.

    Returns
    -------
    ndarray (N,), ndarray (m,)
    """
    known = np.isfinite(values)
    scores = np.full(values.shape, np.nan)
    if not known.any():
        return scores, np.sign(marks) * np.inf
    scores[known] = ndtri((rankdata(values[known]) - 0.5) / known.sum())
    places, first = np.unique(values[known], return_index=True)
    heights = scores[known][first]
    spread = float(np.std(values[known]))
    inside = np.interp(marks, places, heights)
    with np.errstate(divide="ignore", invalid="ignore"):
        above = np.maximum(marks - places[-1], 0.0) / spread
        below = np.minimum(marks - places[0], 0.0) / spread
    return scores, inside + np.nan_to_num(above, posinf=np.inf) + np.nan_to_num(
        below, neginf=-np.inf
    )


@dataclass(frozen=True)
class Response:
    """Fitted answers of figures (N, f) to factors (N, k).

    Attributes
    ----------
    figures : ndarray (N, f)
        As found; NaN where a unit has none: it keeps none, and did not take part in the fit.
    scale : ndarray (k,)
        Standard deviations of the factors.
    terms : ndarray (N, k)
        Factors over their scale.
    fits : tuple
        Columns that miss the same units, their bends and their slopes.
    """

    figures: Floats
    scale: Floats
    terms: Floats
    fits: tuple[tuple[NDArray[np.intp], list[tuple[int, float]], Floats], ...]

    @classmethod
    def of(cls, figures: Floats, factors: Floats) -> Response:
        """Fit all figures; those that fewer than `FEWEST_UNITS` units have stay as they are."""
        scale = factors.std(axis=0)
        scale = np.where(scale > 0.0, scale, 1.0)
        terms, known, fits = factors / scale, np.isfinite(figures), []
        for pattern in np.unique(known, axis=1).T:
            if pattern.sum() >= FEWEST_UNITS:
                columns = np.flatnonzero((known == pattern[:, None]).all(axis=0))
                x, y = terms[pattern], figures[pattern][:, columns]
                bends = _bends(x, y)
                fits.append((columns, bends, slopes(_terms(x, bends), y)))
        return cls(figures, scale, terms, tuple(fits))

    def at(self, changed: Floats) -> Floats:
        """Figures (N, f) of the same units with their factors changed (N, k)."""
        result = self.figures.copy()
        after = changed / self.scale
        for columns, bends, found in self.fits:
            step = _terms(after, bends) - _terms(self.terms, bends)
            result[:, columns] += step @ found
        return result


def foretold(figures: Floats, factors: Floats) -> Floats:
    """Figures (N, f) as the fit to the other half of the units has them: even and odd ones."""
    scale = factors.std(axis=0)
    x = factors / np.where(scale > 0.0, scale, 1.0)
    result = np.full(figures.shape, np.nan)
    odd = np.arange(len(x)) % 2 == 1
    for here in (odd, ~odd):
        for f in range(figures.shape[1]):
            there = ~here & np.isfinite(figures[:, f])
            if there.sum() < FEWEST_UNITS:
                continue
            y = figures[there][:, [f]]
            bends = _bends(x[there], y)
            terms = _terms(x[there], bends)
            away = _terms(x[here], bends) - terms.mean(axis=0)
            result[here, f] = y.mean() + (away @ slopes(terms, y))[:, 0]
    return result


def _bends(x: Floats, y: Floats) -> list[tuple[int, float]]:
    """Factors that some figure hangs on most, each with the places where its line may bend."""
    place = (np.argsort(np.argsort(x, axis=0), axis=0) * BINS) // len(x)
    among = np.stack([(place == b).astype(float) for b in range(BINS)])  # (bins, n, k)
    counts = np.maximum(among.sum(axis=1), 1.0)
    means = np.einsum("bnk,nf->bkf", among, y - y.mean(axis=0)) / counts[:, :, None]
    explained = (counts[:, :, None] * means**2).sum(axis=0)  # (k, f)
    leading = np.unique(np.argsort(-explained, axis=0)[:MOST_BENT])
    quantiles = np.quantile(x[:, leading], KNOTS, axis=0)
    return [
        (int(j), float(knot))
        for j, knots in zip(leading, quantiles.T, strict=True)
        for knot in knots
    ]


def _terms(x: Floats, bends: list[tuple[int, float]]) -> Floats:
    """Factors, and hinges max(x - knot, 0) of those that may bend."""
    hinges = [np.maximum(x[:, j] - knot, 0.0) for j, knot in bends]
    return np.column_stack([x, *hinges])


def slopes(x: Floats, y: Floats) -> Floats:
    """Slopes (k, f) of y (n, f) against x (n, k), by ridge regression."""
    centred, target = x - x.mean(axis=0), y - y.mean(axis=0)
    left, size, right = np.linalg.svd(centred, full_matrices=False)
    kept = size > size[0] * 1e-12 if size.size else size > 0.0
    left, size, right = left[:, kept], size[kept], right[kept]
    if not size.size:
        return np.zeros((x.shape[1], y.shape[1]))
    along = left.T @ target  # (r, f)
    keep = size**2 / (size**2 + PENALTIES[:, None] * size[0] ** 2)  # (p, r)
    outside = (target**2).sum(axis=0) - (along**2).sum(axis=0)
    lost = outside + (1.0 - keep) ** 2 @ along**2  # (p, f) residual squares
    freedom = np.maximum(1.0 - (1.0 + keep.sum(axis=1)) / len(x), 1e-6)
    best = np.argmin(lost / freedom[:, None] ** 2, axis=0)
    found: Floats = right.T @ ((keep[best].T / size[:, None]) * along)
    return found
