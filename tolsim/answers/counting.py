"""How the units of a run are counted: each for itself, or as members of their lots."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from tolsim.design import Lots
from tolsim.stats.clusters import percentiles_of_lots, share_of_lots, tolerance_bound_of_lots
from tolsim.stats.percentiles import Percentiles, percentiles, tolerance_bound
from tolsim.stats.proportion import share_interval, yield_estimate

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]  # (N,)


def sampling_note(method: str) -> dict[str, str]:
    """Entry `sampling` of the quality: how units were drawn, if not at random."""
    if method == "random":
        return {}
    return {"sampling": f"{method}; intervals as for random units, so rather too wide"}


@dataclass(frozen=True)
class Counting:
    """Intervals of shares and percentiles over the N units of a run.

    Attributes
    ----------
    confidence : float
        Two-sided, of every interval.
    group : ndarray (N,) or None
        Number of the group of lots each unit belongs to; units of one group may share reels,
        those of different groups share nothing.  None: every unit has reels of its own.
    """

    confidence: float
    group: NDArray[np.int64] | None = None

    @classmethod
    def of(cls, lots: Lots | None, unit: NDArray[np.int64], confidence: float) -> Counting:
        """Counting of the units with these numbers."""
        return cls(confidence, None if lots is None else unit // lots.block)

    def interval(self, hit: Flags) -> tuple[float, float]:
        """Interval of the share of units hit."""
        if self.group is None:
            low, high = share_interval(int(hit.sum()), hit.size, self.confidence)
            return float(low), float(high)
        found = share_of_lots(hit, self.group, self.confidence)
        return found.low, found.high

    def yield_(self, failed: Flags, undecided: Flags) -> dict[str, Any]:
        """Yield with its interval: undecided units count as failed below and passed above."""
        fails = int(failed.sum())
        open_ = int((undecided & ~failed).sum())
        plain = vars(yield_estimate(failed.size - fails - open_, fails, open_, self.confidence))
        if self.group is None:
            return plain
        least = share_of_lots(failed, self.group, self.confidence)
        most = share_of_lots(failed | undecided, self.group, self.confidence)
        ends = {"low": 1.0 - most.high, "high": 1.0 - least.low}
        return plain | ends | {"counted_by": "lots", "worth": min(least.worth, most.worth)}

    def percentiles(self, values: Floats, shares: Sequence[float]) -> Percentiles:
        """Percentiles of a figure (N,) with their intervals."""
        if self.group is None:
            return percentiles(values, shares, self.confidence)
        return percentiles_of_lots(values, self.group, tuple(shares), self.confidence)

    def bound(self, values: Floats, coverage: float, side: Literal["high", "low"]) -> float:
        """Bound that a share `coverage` of units keeps."""
        if self.group is None:
            return tolerance_bound(values, coverage, self.confidence, side)
        return tolerance_bound_of_lots(values, self.group, coverage, self.confidence, side)
