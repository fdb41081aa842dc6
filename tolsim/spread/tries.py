"""What differs between two tries to start the same unit: chance that belongs to no part.

Streams are keyed by the seed of the study and the number of the unit; try j takes number j.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tolsim.spread.streams import random

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Tries:
    """Draws for T tries of each of some units."""

    phase: Floats  # (N, T) rad, of the noise the oscillation grows from
    off_time: Floats  # (N, T) s, since it ran last
    stretch: Floats  # (N, T) factor on every ramp time


def draw_tries(
    seed: int,
    units: NDArray[np.int64],
    tries: int,
    off_time: tuple[float, float],
    jitter: float,
) -> Tries:
    """Draw what differs between tries.

    Parameters
    ----------
    seed : int
        Of the study.
    units : (N,)
        Their numbers.
    tries : int
        T.
    off_time : (float, float)
        s, between which the logarithm of the off time is uniform.
    jitter : float
        Share by which ramp times scatter to either side, uniformly.
    """

    def shares(what: str) -> Floats:
        return np.stack([random(seed, f"try of unit {k}: {what}", 0, tries) for k in units])

    low, high = np.log(off_time)
    return Tries(
        phase=2.0 * np.pi * shares("phase"),
        off_time=np.exp(low + (high - low) * shares("off time")),
        stretch=1.0 + jitter * (2.0 * shares("ramp") - 1.0),
    )
