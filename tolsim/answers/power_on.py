"""What became of the units that were switched on in time, and what a latch does to them."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tolsim.answers.counting import Counting
from tolsim.answers.unit_files import UnitRows
from tolsim.design import Study

Flags = NDArray[np.bool_]

SHARES = {"p5": 0.05, "p50": 0.50, "p95": 0.95}
FIRST_UNITS = 5
STARTED = "starts"
NOT_RUN = ""
COLUMN = "power_on"
SURE_MARGIN_DB = 1.5  # start margin from which a growing unit with an orbit is taken to start


def power_on_entry(study: Study, rows: UnitRows, counting: Counting) -> dict[str, Any]:
    """Power-on of a run's units; empty if none was switched on in time.

    The keys are documented in `tolsim.answers.results`.
    """
    if COLUMN not in rows.source.names:
        return {}
    codes, words = rows.words(COLUMN)
    ran = codes != (words.index(NOT_RUN) if NOT_RUN in words else -2)
    if not ran.any():
        return {}
    started = codes == (words.index(STARTED) if STARTED in words else -2)
    sure = _looked_sure(rows)
    cases = []
    for c in np.flatnonzero(ran.any(axis=0)):
        condition, state = rows.cases[c]
        cases.append(
            {
                "condition": condition,
                "state": state,
                "units": int(ran[:, c].sum()),
                "in_doubt": int((ran & ~sure)[:, c].sum()),
                "sure": int((ran & sure)[:, c].sum()),
                "sure_failed": int((ran & sure & ~started)[:, c].sum()),
                "fates": [
                    {
                        "fate": word,
                        "units": int(np.sum(codes[:, c] == code)),
                        "first_units": rows.unit[codes[:, c] == code][:FIRST_UNITS].tolist(),
                    }
                    for code, word in enumerate(words)
                    if word != NOT_RUN and np.any(codes[:, c] == code)
                ],
                "time": _times(rows, counting, int(c)),
            }
        )
    failed = int((ran & sure & ~started).any(axis=1).sum())
    return {
        "share": study.run.power_on_share,
        "units": int(ran.any(axis=1).sum()),
        "of_units": int(rows.unit.size),
        "cases": cases,
        "sure_failed": failed,
        "warning": failed > 0,
        "latched": _latched(study, rows, codes, words),
    }


def _looked_sure(rows: UnitRows) -> Flags:
    """Units (N, cases) that orbit and modes alone would have let start."""
    codes, words = rows.words("status")
    settled = codes == (words.index("settled") if "settled" in words else -2)
    if "start_margin" not in rows.source.names:
        return settled
    grows = rows.figure("growth_rate") > 0
    return np.asarray(settled & grows & (rows.figure("start_margin") > SURE_MARGIN_DB), dtype=bool)


def _times(rows: UnitRows, counting: Counting, case: int) -> dict[str, Any]:
    """Percentiles of the power-on time in one case; empty if nobody started."""
    if "power_on_time" not in rows.source.names:
        return {}
    values = rows.figure("power_on_time")[:, case]
    if not np.isfinite(values).any():
        return {}
    found = counting.percentiles(values, list(SHARES.values()))
    ends = zip(SHARES, found.low, found.high, strict=True)
    return {
        "units": found.units,
        **dict(zip(SHARES, found.value.tolist(), strict=True)),
        "interval": {name: [low, high] for name, low, high in ends},
    }


def _latched(
    study: Study, rows: UnitRows, codes: NDArray[np.intp], words: Sequence[str]
) -> dict[str, Any]:
    """Units that latch in any case: current, and time to damage against the fuse."""
    if "latched" not in words:
        return {}
    hit = codes == words.index("latched")
    unit = hit.any(axis=1)
    trips = [rail.trip_time for rail in study.design.rails.values() if rail.trip_time is not None]
    trip = min(trips, default=None)
    columns = [name for name in rows.source.names if name.endswith(".latch_damage_time")]
    times = np.full(rows.unit.size, np.inf)
    for column in columns:
        value = rows.figure(column)
        times = np.minimum(times, np.where(np.isnan(value), np.inf, value).min(axis=1))
    current = np.nanmax(rows.figure("latch_current")[unit], axis=1)
    last = times[unit]
    return {
        "units": int(unit.sum()),
        "first_units": rows.unit[unit][:FIRST_UNITS].tolist(),
        "current": {"median": float(np.median(current)), "highest": float(current.max())},
        "shortest_damage_time": float(last.min()) if np.isfinite(last).any() else None,
        "never_damaged": int(np.isinf(last).sum()),
        "trip_time": trip,
        "saved_by_trip": None if trip is None else int(np.sum(last > trip)),
    }
