"""What units alike do: the share of hits among the nearest in the few factors that decide.

For verdicts that change at a jump (a stage that starts, or does not) no line through a figure
foretells the hit; the nearest units do, if a few factors decide.  A factor counts by the share of
the variance of the hit that its bins explain beyond chance, and distances are weighted by it.
(Nearest neighbours: Stone, Ann. Stat. 5 (1977) 595-645.)
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import KDTree

Floats = NDArray[np.float64]

BINS = 8  # of equal count
MOST = 4  # factors: with more, no unit has near neighbours
SURE = 4.0  # standard deviations above what chance explains
NEAREST = 8
FEWEST_OF_EACH = 20  # hits, and units that are none


@dataclass(frozen=True)
class Neighbours:
    """Units (n,) with their hits, in the factors that decide; none if no factor does."""

    columns: NDArray[np.intp]
    scale: Floats
    known: Floats
    hit: Floats

    @classmethod
    def of(cls, x: Floats, hit: Floats) -> Neighbours | None:
        """Find the factors (n, k) that decide whether units are hit (n,)."""
        n = len(x)
        total = float(np.sum((hit - hit.mean()) ** 2))
        if min(hit.sum(), n - hit.sum()) < FEWEST_OF_EACH:
            return None  # what so few units have in common is chance
        place = (np.argsort(np.argsort(x, axis=0, kind="stable"), axis=0) * BINS) // n
        explained = np.zeros(x.shape[1])
        for b in range(BINS):
            inside = place == b
            count = np.maximum(inside.sum(axis=0), 1)
            explained += count * ((inside * hit[:, None]).sum(axis=0) / count - hit.mean()) ** 2
        chance = (BINS - 1 + SURE * np.sqrt(2.0 * (BINS - 1))) / (n - 1)
        share = explained / total - (BINS - 1) / (n - 1)
        deciding = np.flatnonzero((explained / total > chance) & (x.std(axis=0) > 0.0))
        if not deciding.size:
            return None
        columns = deciding[np.argsort(-share[deciding], kind="stable")[:MOST]]
        scale = np.sqrt(share[columns]) / x[:, columns].std(axis=0)
        return cls(columns, scale, x[:, columns] * scale, hit)

    def share_at(self, x: Floats) -> Floats:
        """Share of hits among the units nearest to each place (m, k)."""
        nearest = self._nearest(x[:, self.columns] * self.scale, NEAREST)
        return np.asarray(self.hit[nearest].mean(axis=1), np.float64)

    def share_around(self) -> Floats:
        """The same at each unit itself, from the others (n,)."""
        nearest = self._nearest(self.known, NEAREST + 1)
        own = nearest == np.arange(len(nearest))[:, None]
        own[~own.any(axis=1), -1] = True  # units at the same place: any of them may be left out
        return np.asarray(
            self.hit[nearest[~own].reshape(len(own), NEAREST)].mean(axis=1), np.float64
        )

    def _nearest(self, places: Floats, count: int) -> NDArray[np.intp]:
        """Numbers of the nearest units (m, count), nearest first."""
        _, numbers = KDTree(self.known).query(places, count)
        return np.asarray(numbers, np.intp)
