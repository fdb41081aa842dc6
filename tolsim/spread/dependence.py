"""How factors that are drawn independently come to depend on each other in the parts.

Two ways, both leaving every law as it is.  A *tie* is a Gaussian copula: the normal score of a
part's draw becomes a weighted sum of the scores of other draws and its own.  A *match* puts a part
into the bin of the part it was picked to go with.  No chance happens here: what goes in are shares
that `tolsim.spread.sampling` has drawn.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr, ndtri

from tolsim.laws import Law

Floats = NDArray[np.float64]

ROUNDING = 1e-9  # of eigenvalues
EDGE = 2.0**-53  # nearest to 0 and 1 that a share may come


@dataclass(frozen=True)
class Tie:
    """A draw that follows others: score = sum of weight x score of a leader + own x own score.

    Attributes
    ----------
    leaders : tuple of (str, float)
        Names of factors and their weights.
    own : float
        Weight of the factor's own draw, so that the score has variance 1.
    """

    leaders: tuple[tuple[str, float], ...]
    own: float

    @classmethod
    def to_reel(cls, reel: str, tracking: float) -> Tie:
        """Tie to a draw that a reel shares: two parts of the reel then correlate by `tracking`."""
        return cls(((reel, math.sqrt(tracking)),), math.sqrt(1.0 - tracking))

    @classmethod
    def to_quantities(cls, names: Sequence[str], among: Floats, wanted: Floats) -> Tie:
        """Tie to other quantities of the same part.

        Parameters
        ----------
        names : sequence of str (m,)
            Their factors.
        among : ndarray (m, m)
            Correlations between their scores; positive definite.
        wanted : ndarray (m,)
            Correlation of the new score with each of them.
        """
        weights = np.linalg.solve(among, wanted)
        rest = 1.0 - float(wanted @ weights)
        pairs = zip(names, weights.tolist(), strict=True)
        return cls(tuple(pair for pair in pairs if pair[1] != 0.0), math.sqrt(max(rest, 0.0)))

    def rank(self, own: Floats, leaders: Sequence[Floats]) -> Floats:
        """Shares (n,) that follow the leaders, from own shares and those of every leader."""
        score = self.own * ndtri(own)
        for (_, weight), share in zip(self.leaders, leaders, strict=True):
            score = score + weight * ndtri(share)
        return np.clip(ndtr(score), EDGE, 1.0 - EDGE)


@dataclass(frozen=True)
class Match:
    """A part picked to lie in the same bin as another one.

    Bins of `width`, in the numbers of the law, are laid side by side from the middle of the lot;
    so two matched parts differ by no more than `width`, and the law of each is that of the lot.
    """

    mate: str
    width: float

    def rank(self, own: Floats, mate: Floats, law: Law) -> Floats:
        """Shares (n,) inside the bins of the mates, from own shares and those of the mates."""
        middle = np.floor(law.ppf(mate) / self.width + 0.5)
        low = law.cdf((middle - 0.5) * self.width)
        high = law.cdf((middle + 0.5) * self.width)
        return np.clip(low + own * (high - low), EDGE, 1.0 - EDGE)


def correlation_matrix(names: Sequence[str], pairs: Mapping[tuple[str, str], float]) -> Floats:
    """Correlations (m, m) between named scores; pairs that are not named are independent."""
    matrix = np.eye(len(names))
    for (one, other), rho in pairs.items():
        if one in names and other in names:
            i, j = names.index(one), names.index(other)
            matrix[i, j] = matrix[j, i] = rho
    return matrix


def is_possible(matrix: Floats) -> bool:
    """True if scores can have these correlations: the matrix is positive definite."""
    return not matrix.size or bool(np.linalg.eigvalsh(matrix)[0] > ROUNDING)
