"""The envelope of a swing at the end of a run: steady, or coming and going."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from tolsim.circuit.devices import Floats
from tolsim.circuit.transients.journey import Journey

BURST_RATIO = 1.3  # of largest to smallest swing in the last third, for bursts
OSCILLATES = 0.05  # of the goal: less is no oscillation
TURNS = 4  # crossings of the middle level by the envelope of a bursting unit: two ups and downs


def _last_third(journey: Journey) -> Floats:
    """Swing of the lead in the last third of the windows, NaN where there is none, (N, w)."""
    swing = (journey.watch_high[:, :, 0] - journey.watch_low[:, :, 0]).astype(float)
    window = np.arange(swing.shape[1])
    kept = np.minimum(journey.windows, swing.shape[1])[:, None]
    inside = (window >= kept - np.maximum(kept // 3, 1)) & (window < kept)
    return np.where(inside, swing, np.nan)


def envelope(journey: Journey) -> tuple[Floats, Floats]:
    """Largest over smallest swing of the last third of the run, and its median."""
    swing = _last_third(journey)
    some = np.isfinite(swing).any(axis=1)
    ratio, level = np.full(len(swing), np.inf), np.zeros(len(swing))
    if some.any():
        high, low = np.nanmax(swing[some], axis=1), np.nanmin(swing[some], axis=1)
        ratio[some] = high / np.maximum(low, 1e-30)
        level[some] = np.nanmedian(swing[some], axis=1)
    return ratio, level


def comes_and_goes(journey: Journey, up: Floats, least: Floats) -> NDArray[np.bool_]:
    """Whether the swing has risen and fallen much, and more than once, since all sources are up.

    Parameters
    ----------
    up : (N,)
        s, when the sources had reached their final values.
    least : (N,)
        Swing below which there is no oscillation.  Bursts may be short against the pauses between
        them, so it is held against the largest swing of the last third, not against its median.
    """
    late = _last_third(journey)
    swing = journey.watch_high[:, :, 0] - journey.watch_low[:, :, 0]
    begun = np.maximum((up - journey.begin) / journey.window, 0.0).astype(int)
    answer = np.zeros(len(swing), dtype=bool)
    for unit, row in enumerate(swing):
        kept = row[begun[unit] : journey.windows[unit]]
        tail = late[unit][np.isfinite(late[unit])]
        if kept.size and tail.size and tail.max() > least[unit]:
            high = kept > 0.5 * (kept.max() + kept.min())
            answer[unit] = np.count_nonzero(high[1:] != high[:-1]) >= TURNS
    return answer
