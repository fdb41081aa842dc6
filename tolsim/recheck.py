"""An orbit must stay an orbit when it is integrated in time with finer steps.

A few units in every case are marched from a point of their orbit through several periods with
twice the steps.  They agree if frequency, extremes and rms values of every net voltage and branch
current are still the same in the last period.  (Whether disturbances die out is told by the
Floquet multipliers of every unit; the slow ones take hundreds of periods.)
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from tolsim.circuit.devices import Floats
from tolsim.circuit.orbit import Solution, Status, joined
from tolsim.circuit.thermal import Case
from tolsim.circuit.transient import march
from tolsim.evaluation import Plan, built, solve_case
from tolsim.spread.sampling import draw_chosen

LEAST_UNITS = 4  # per case
SHARE = 0.01
MOST_UNITS = 16  # per case
CYCLES = 8
FINER = 2
AGREES_WITHIN = 0.005  # of the largest value of each state
FREQUENCY_WITHIN = 0.0005
REGULAR_WITHIN = 0.1  # of the period, for an interval between crossings to be one


@dataclass(frozen=True)
class _Sample:
    """Settled units of several cases, side by side."""

    case: Case
    solution: Solution
    scale: Floats  # (N, n)
    lead: int


def recheck(plan: Plan) -> dict[str, Any]:
    """Re-check a sample of units in the time domain.

    Returns
    -------
    dict
        `rechecked` {units, share, agreed, worst_difference, worst_frequency_difference} and
        `steps` {steps_per_cycle, recheck_steps_per_cycle, recheck_cycles}; counts are of units
        in a case, worst differences relative.
    """
    steps = plan.study.run.steps_per_cycle
    sample = _sample(plan)
    report: dict[str, Any] = {
        "steps": {
            "steps_per_cycle": steps,
            "recheck_steps_per_cycle": FINER * steps,
            "recheck_cycles": CYCLES,
        }
    }
    total = plan.study.run.units * len(plan.cases)
    if sample is None:
        nothing = {"units": 0, "share": 0.0, "agreed": 0, "worst_difference": None}
        return report | {"rechecked": nothing | {"worst_frequency_difference": None}}
    differences, frequency = _differences(sample, FINER * steps)
    agreed = (differences < AGREES_WITHIN) & (frequency < FREQUENCY_WITHIN)
    report["rechecked"] = {
        "units": len(agreed),
        "share": len(agreed) / total,
        "agreed": int(agreed.sum()),
        "worst_difference": float(np.nanmax(differences)),
        "worst_frequency_difference": float(np.nanmax(frequency)),
    }
    return report


def _sample(plan: Plan) -> _Sample | None:
    """Evenly spaced units in every case; those without a stable orbit have nothing to re-check."""
    units = plan.study.run.units
    count = min(units, MOST_UNITS, max(LEAST_UNITS, round(SHARE * units)))
    numbers = np.unique(np.linspace(0, units - 1, count).astype(int))
    draws = built(plan, draw_chosen(plan.factors, plan.study.run.seed, numbers))
    cases, solutions, scales, lead = [], [], [], 0
    for name, prepared in plan.cases.items():
        frame = prepared.compass.nominal.frame
        assert frame is not None
        lead = frame.lead
        case, solution = solve_case(plan, name, draws)
        settled = np.flatnonzero(solution.status == Status.SETTLED)
        if settled.size:
            cases.append(case.take(settled))
            solutions.append(solution.take(settled))
            scales.append(np.broadcast_to(frame.scale, (settled.size, len(frame.scale))))
    if not cases:
        return None
    return _Sample(_side_by_side(cases), joined(solutions), np.concatenate(scales), lead)


def _side_by_side(cases: list[Case]) -> Case:
    values: Mapping[str, Floats] = {
        key: np.concatenate([case.values[key] for case in cases]) for key in cases[0].values
    }
    return Case(cases[0].design, values, cases[0].heated)


def _differences(sample: _Sample, steps: int) -> tuple[Floats, Floats]:
    """Largest relative difference of any state, and that of the frequency, (N,) each."""
    solution = sample.solution
    network = sample.case.network(solution.junctions)
    driven = network.drive_frequency is not None
    with np.errstate(all="ignore"):
        path = march(
            network,
            solution.samples[0],
            solution.period / steps,
            CYCLES * steps,
            1 / steps if driven else 0.0,
        )
    last = path[-steps - 1 :: FINER]  # the instants of the orbit's own grid
    orbit = solution.samples
    largest = np.maximum(np.abs(orbit).max(axis=0), sample.scale)
    gaps = [
        np.abs(last.max(axis=0) - orbit.max(axis=0)),
        np.abs(last.min(axis=0) - orbit.min(axis=0)),
        np.abs(_rms(last) - _rms(orbit)),
    ]
    difference = (np.max(gaps, axis=0) / largest).max(axis=1)
    if driven:
        return difference, np.zeros(solution.units)
    return difference, _frequency_gap(path[:, :, sample.lead], orbit[:, :, sample.lead], steps)


def _rms(path: Floats) -> Floats:
    return np.sqrt(np.mean(path[:-1] ** 2, axis=0))


def _frequency_gap(wave: Floats, orbit: Floats, steps: int) -> Floats:
    """Relative difference between the interval of the last two upward crossings and the period."""
    level = 0.5 * (orbit.max(axis=0) + orbit.min(axis=0))
    gap = np.full(wave.shape[1], np.inf)
    for unit in range(wave.shape[1]):
        centred = wave[:, unit] - level[unit]
        up = np.flatnonzero((centred[:-1] < 0) & (centred[1:] >= 0))
        times = up + centred[up] / (centred[up] - centred[up + 1])
        intervals = np.diff(times)
        near = intervals[np.abs(intervals / steps - 1) < REGULAR_WITHIN]
        if near.size:
            gap[unit] = abs(near[-1] / steps - 1)
    return gap
