"""Repeated starts: the same units switched on again and again, kept apart from unit to unit.

From try to try differ the phase of the noise, the time since the unit ran last, with the charge
that is left of it, and the ramp times.  Half of the units are those of the smallest start margin
among the first `POOL`; the others are the first of the rest, so they are units at random.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from joblib import Parallel, delayed

from tolsim.circuit.devices import Floats, Ints
from tolsim.circuit.poweron.fates import Fate
from tolsim.circuit.poweron.ramps import profiles_of
from tolsim.circuit.poweron.switch_on import FAST_PERIODS
from tolsim.evaluation import Plan, built, stored_plan
from tolsim.figures import measure_start
from tolsim.nominals import case_of
from tolsim.spread.part_values import part_values
from tolsim.spread.sampling import draw, draw_chosen
from tolsim.spread.tries import draw_tries
from tolsim.starts.asked import RepeatedStarts
from tolsim.starts.attempt import (
    FATE_NAMES,
    Attempt,
    running,
    stretched_ramps,
    switch_units_on,
)
from tolsim.starts.leftover import left_over, states_of
from tolsim.stats.proportion import share_interval
from tolsim.stats.variance_split import share_between
from tolsim.workers import on_disk

Progress = Callable[[int, int], None]

POOL = 100  # units among which those of the smallest start margin are looked for


@dataclass(frozen=True)
class UnitTries:
    """T tries of one unit, and whether leftover charge counted in them."""

    attempt: Attempt  # (T,)
    charge_counts: bool


def repeated_starts(
    plan: Plan, asked: RepeatedStarts, jobs: int | None = None, progress: Progress | None = None
) -> dict[str, Any]:
    """Switch some units of a plan on again and again.

    Returns
    -------
    dict
        As the key `repeated_starts` of the summary.
    """
    numbers, margins = _chosen(plan, asked)
    found: list[UnitTries] = []
    with on_disk(plan) as plan_file, Parallel(n_jobs=jobs or -1, return_as="generator") as work:
        for tries in work(delayed(_stored_tries)(plan_file, asked, int(k)) for k in numbers):
            found.append(tries)
            if progress is not None:
                progress(len(found), len(numbers))
    worst = asked.units // 2
    started = np.array([tries.attempt.starts for tries in found])
    confidence = plan.study.run.confidence
    return {
        "condition": asked.condition,
        "state": asked.state,
        "tries": asked.tries,
        "confidence": confidence,
        "off_time": list(asked.off_time),
        "ramp_jitter": asked.ramp_jitter,
        "charge_counts": any(tries.charge_counts for tries in found),
        "units": [
            {
                "unit": int(number),
                "chosen": "smallest start margin" if k < worst else "at random",
                "start_margin": float(margin) if np.isfinite(margin) else None,
                **_unit_entry(tries.attempt, confidence),
            }
            for k, (number, margin, tries) in enumerate(zip(numbers, margins, found, strict=True))
        ],
        "split": {"units": len(found) - worst, "between": share_between(started[worst:])},
    }


def tries_of_unit(plan: Plan, asked: RepeatedStarts, number: int) -> UnitTries:
    """Switch one unit on again and again."""
    name, design, tries = (asked.condition, asked.state), plan.study.design, asked.tries
    draws = built(plan, draw_chosen(plan.factors, plan.study.run.seed, np.array([number])))
    unit = running(plan, name, draws, {})
    units = unit.take(np.zeros(tries, dtype=np.intp))
    chance = draw_tries(
        plan.study.run.seed, np.array([number]), tries, asked.off_time, asked.ramp_jitter
    )
    stretched: dict[str, Floats | float] = {
        rail: profile.rise * chance.stretch[0] for rail, profile in profiles_of(design).items()
    }
    ramps = stretched_ramps(design, tries, stretched)
    network = units.cold.network(units.cold.cold_junctions(), live_rails=True)
    charged = states_of(units.cold, network, units.mean)
    charge = left_over(network, charged, chance.off_time[0])
    attempt = switch_units_on(units, ramps, phase=chance.phase[0], charge=charge)
    return UnitTries(attempt, bool(np.any(ramps.up <= FAST_PERIODS * units.expected.period)))


def _stored_tries(plan_file: str, asked: RepeatedStarts, number: int) -> UnitTries:
    return tries_of_unit(stored_plan(plan_file), asked, number)


def _chosen(plan: Plan, asked: RepeatedStarts) -> tuple[Ints, Floats]:
    """Numbers of the units to repeat and their start margins, dB."""
    name = (asked.condition, asked.state)
    pool = max(POOL, asked.units)
    draws = built(plan, draw(plan.factors, plan.study.run.seed, 0, pool))
    cold = case_of(plan.study, part_values(plan.study, plan.tables, *name, draws))
    margins = measure_start(cold, plan.cases[name].start)["start_margin"]
    order = np.argsort(np.where(np.isfinite(margins), margins, -np.inf), kind="stable")
    worst = order[: asked.units // 2]
    rest = np.setdiff1d(np.arange(pool), worst)[: asked.units - worst.size]
    numbers = np.concatenate([worst, rest])
    return numbers, margins[numbers]


def _unit_entry(attempt: Attempt, confidence: float) -> dict[str, Any]:
    tries, starts = len(attempt.fate), int(attempt.starts.sum())
    low, high = share_interval(starts, tries, confidence)
    counts = Counter(Fate(fate) for fate in attempt.fate.tolist()).most_common()
    times = attempt.start_time[np.isfinite(attempt.start_time)]
    return {
        "starts": starts,
        "share": starts / tries,
        "low": float(low),
        "high": float(high),
        "all_low": float(share_interval(tries, tries, confidence)[0]),
        "outcomes": [{"outcome": FATE_NAMES[fate], "tries": count} for fate, count in counts],
        "start_time": None
        if not times.size
        else {
            "shortest": float(times.min()),
            "p50": float(np.median(times)),
            "longest": float(times.max()),
        },
    }
