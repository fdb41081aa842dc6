"""The start map: the same units switched on under every pair of values of two axes."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Mapping
from typing import Any

import numpy as np
from joblib import Parallel, delayed
from numpy.typing import NDArray

from tolsim.answers.counting import Counting
from tolsim.circuit.poweron.fates import Fate
from tolsim.evaluation import Plan, built, stored_plan
from tolsim.spread.sampling import Draws, draw
from tolsim.starts.asked import RAMP_TIME, Axis, StartMap
from tolsim.starts.attempt import (
    FATE_NAMES,
    Attempt,
    Running,
    running,
    stretched_ramps,
    switch_units_on,
)
from tolsim.workers import on_disk

Progress = Callable[[int, int], None]
Cell = tuple[int, int]  # place across, place down

FIRST_UNITS = 20


def start_map(
    plan: Plan, asked: StartMap, jobs: int | None = None, progress: Progress | None = None
) -> dict[str, Any]:
    """Switch the first units of a plan on in every cell of a map.

    Every cell has the same units, so cells differ by what is set and not by chance.

    Parameters
    ----------
    plan : Plan
    asked : StartMap
    jobs : int, optional
        Worker processes; all cores if not given.
    progress : callable, optional
        Called with (finished cells, all cells).

    Returns
    -------
    dict
        As the key `start_map` of the summary.
    """
    draws = built(plan, draw(plan.factors, plan.study.run.seed, 0, asked.units))
    cells = [(i, j) for j in range(len(asked.down.values)) for i in range(len(asked.across.values))]
    settings = {_setting_key(asked, cell): cell for cell in cells}
    found: dict[Cell, Attempt] = {}
    orbits: dict[Cell, int] = {}
    with on_disk(plan) as plan_file, Parallel(n_jobs=jobs or -1, return_as="generator") as work:
        solved = dict(
            zip(
                settings,
                work(
                    delayed(_running)(plan_file, asked, cell, draws) for cell in settings.values()
                ),
                strict=True,
            )
        )
        own = [solved[_setting_key(asked, cell)] for cell in cells]
        attempts = work(
            delayed(switched_on)(plan_file, asked, cell, units)
            for cell, units in zip(cells, own, strict=True)
        )
        for cell, units, attempt in zip(cells, own, attempts, strict=True):
            found[cell], orbits[cell] = attempt, int(units.has_orbit.sum())
            if progress is not None:
                progress(len(found), len(cells))
    return map_entry(plan, asked, draws, found, orbits)


def setting_of(asked: StartMap, cell: Cell) -> dict[str, float]:
    """What a cell sets beside ramps."""
    pairs = ((asked.across, cell[0]), (asked.down, cell[1]))
    return {axis.what: axis.values[k] for axis, k in pairs if axis.what != RAMP_TIME}


def _setting_key(asked: StartMap, cell: Cell) -> tuple[tuple[str, float], ...]:
    return tuple(sorted(setting_of(asked, cell).items()))


def _running(plan_file: str, asked: StartMap, cell: Cell, draws: Draws) -> Running:
    name = (asked.condition, asked.state)
    return running(stored_plan(plan_file), name, draws, setting_of(asked, cell))


def switched_on(plan_file: str, asked: StartMap, cell: Cell, units: Running) -> Attempt:
    """Switch the units on in one cell."""
    return in_cell(stored_plan(plan_file), asked, cell, units)


def in_cell(plan: Plan, asked: StartMap, cell: Cell, units: Running) -> Attempt:
    """Switch the units on in one cell; ramps are stretched where an axis says so."""
    rails = plan.study.design.rails
    ramp_times = {
        rail: axis.values[k]
        for axis, k in ((asked.across, cell[0]), (asked.down, cell[1]))
        if axis.what == RAMP_TIME
        for rail in axis.rails or rails
    }
    ramps = stretched_ramps(plan.study.design, units.cold.units, ramp_times)
    return switch_units_on(units, ramps)


def map_entry(
    plan: Plan,
    asked: StartMap,
    draws: Draws,
    found: Mapping[Cell, Attempt],
    orbits: Mapping[Cell, int],
) -> dict[str, Any]:
    """A start map as the summary holds it."""
    numbers = np.arange(draws.first, draws.first + draws.count, dtype=np.int64)
    counting = Counting.of(plan.study.lots, numbers, plan.study.run.confidence)
    return {
        "condition": asked.condition,
        "state": asked.state,
        "units": draws.count,
        "confidence": counting.confidence,
        "across": _axis_entry(plan, asked.across),
        "down": _axis_entry(plan, asked.down),
        "cells": [
            {
                "across": asked.across.values[cell[0]],
                "down": asked.down.values[cell[1]],
                "with_orbit": orbits[cell],
                **_cell_entry(attempt, numbers, counting),
            }
            for cell, attempt in found.items()
        ],
    }


def _axis_entry(plan: Plan, axis: Axis) -> dict[str, Any]:
    rails = list(axis.rails or plan.study.design.rails) if axis.what == RAMP_TIME else []
    return {
        "what": axis.what,
        "rails": rails,
        "all_rails": axis.what == RAMP_TIME and len(rails) == len(plan.study.design.rails),
        "unit_of_measure": axis.unit_of_measure,
        "values": list(axis.values),
    }


def _cell_entry(attempt: Attempt, numbers: NDArray[np.int64], counting: Counting) -> dict[str, Any]:
    """Outcomes of one cell, commonest first after the good one, and the units that fail."""
    counts = Counter(attempt.fate.tolist())
    order = sorted(counts, key=lambda fate: (fate != Fate.STARTS, -counts[fate], fate))
    if Fate.STARTS not in counts:
        order = [Fate.STARTS, *order]
    outcomes = []
    for fate in order:
        low, high = counting.interval(attempt.fate == fate)
        outcomes.append(
            {
                "outcome": FATE_NAMES[Fate(fate)],
                "units": counts[fate],
                "share": counts[fate] / len(numbers),
                "low": low,
                "high": high,
            }
        )
    times = attempt.start_time[np.isfinite(attempt.start_time)]
    return {
        "outcomes": outcomes,
        "first_failing": numbers[~attempt.starts][:FIRST_UNITS].tolist(),
        "start_time": float(np.median(times)) if times.size else None,
    }
