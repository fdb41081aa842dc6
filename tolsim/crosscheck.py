"""Two solvers, one truth: a share of the units is solved by shooting beside the bulk solver."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import numpy as np
from joblib import Parallel, cpu_count, delayed, parallel_config
from numpy.typing import NDArray

from tolsim.answers.bounds import bounds, named_figure, rating_of
from tolsim.circuit.continuation import solve_units
from tolsim.design import Study
from tolsim.evaluation import Plan, built, solve_case
from tolsim.figure_names import figures_of
from tolsim.figures import measure_orbits
from tolsim.nominals import CaseName
from tolsim.spread.sampling import Draws, draw_chosen

Floats = NDArray[np.float64]

SHARE = 0.01
LEAST_UNITS = 16
PART = 32  # units compared side by side
WARNING = 0.005  # relative disagreement from which the verdict carries a warning
ALWAYS = ("frequency", "supply_current", "input_power", "output_power")


def crosscheck(plan: Plan, jobs: int | None = 1) -> dict[str, Any]:
    """Solve some units of every case served by the bulk solver by shooting as well.

    Parameters
    ----------
    jobs : int, optional
        Worker processes; all cores if None.

    Returns
    -------
    dict
        {units, share, worst {figure, condition, state, difference}, worst_judged (the same among
        stage figures and those a limit of the study judges), warning (of `worst_judged`)}; empty
        if shooting served every case.  Differences are over stage figures and all figures with a
        rating or limit, relative to the value or to that limit, whichever is larger: a narrow
        current spike is right to a few percent of itself, which matters only near its limit.
    """
    served = {name: choice for name, choice in plan.choices.items() if choice.plan is not None}
    if not served:
        return {}
    units = plan.study.run.units
    wanted = min(units, max(-(-LEAST_UNITS // len(served)), round(SHARE * units)))
    # any units will do, but the same ones every time the run is repeated
    rng = np.random.default_rng([plan.study.run.seed, units])
    numbers = np.sort(rng.choice(units, wanted, replace=False))
    draws = built(plan, draw_chosen(plan.factors, plan.study.run.seed, numbers))
    found = _compared(plan, tuple(served), draws, jobs)
    judged = {*ALWAYS, *(bound.column for bound in bounds(plan.study))}
    worst_judged = _largest([entry for entry in found if entry["figure"] in judged])
    return {
        "units": wanted * len(served),
        "share": wanted / units,
        "worst": _largest(found),
        "worst_judged": worst_judged,
        "warning": bool(worst_judged["difference"] > WARNING),
    }


def _compared(
    plan: Plan, names: tuple[CaseName, ...], draws: Draws, jobs: int | None
) -> list[dict[str, Any]]:
    """Differences in every case, the units in parts of constant size whatever the jobs.

    Shooting is so much slower than the bulk solver that done alone by one process it would keep
    the others waiting.
    """
    tasks = [
        (_only(plan, name), name, draws.rows(begin, PART))
        for name in names
        for begin in range(0, draws.count, PART)
    ]
    with parallel_config(backend="loky", inner_max_num_threads=1):
        work = Parallel(n_jobs=min(jobs or cpu_count(), len(tasks)))
        found = work(delayed(_compare)(*task) for task in tasks)
    return [entry for part in found for entry in part]


def _only(plan: Plan, name: CaseName) -> Plan:
    """The plan with a single case, which is less to send."""
    choices = {name: plan.choices[name]}
    return replace(plan, cases={name: plan.cases[name]}, choices=choices)


def _largest(entries: list[dict[str, Any]]) -> dict[str, Any]:
    return max(entries, key=lambda entry: float(entry["difference"]))


def _compare(plan: Plan, name: CaseName, draws: Draws) -> list[dict[str, Any]]:
    """Largest relative difference over the units, of every figure that matters, in one case."""
    case, mine = solve_case(plan, name, draws)
    steps = plan.study.run.steps_per_cycle
    other = solve_units(case, plan.cases[name].compass, steps)
    ours, theirs = measure_orbits(case, mine), measure_orbits(case, other)
    found = []
    for column, floor in _floors(plan.study).items():
        if column not in ours or column not in theirs:
            continue
        size = np.maximum(np.maximum(np.abs(ours[column]), np.abs(theirs[column])), floor)
        gap = np.abs(ours[column] - theirs[column]) / np.where(size > 0, size, 1.0)
        difference = float(np.nanmax(gap, initial=0.0))
        place = {"condition": name[0], "state": name[1]}
        found.append({"figure": column, **place, "difference": difference})
    return found


def _floors(study: Study) -> Mapping[str, float]:
    """Columns that are compared, each with its limit or rating (0 without one)."""
    floors = dict.fromkeys(ALWAYS, 0.0)
    for bound in bounds(study):
        size = bound.at_most if bound.at_most is not None else bound.at_least
        floors[bound.column] = abs(size or 0.0)
    for ref, part in study.design.parts.items():
        for figure_column in (f"{ref}.{name}" for name in _rated(part.kind)):
            named = named_figure(study, figure_column)
            rating = None if named is None else rating_of(study, *named)
            if rating is not None:
                floors.setdefault(figure_column, rating)
    return floors


def _rated(kind: str) -> tuple[str, ...]:
    """Figures of a kind of part that are compared with a rating."""
    return tuple(info.name for info in figures_of(kind) if info.rating is not None)
