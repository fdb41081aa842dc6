"""Changes of load of one unit, and of the nominal one, as envelopes over time."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from pathlib import Path

import numpy as np

from tolsim.answers.results import STUDY_FILE, TABLES_FOLDER, Results
from tolsim.circuit.load_change.road import ratings
from tolsim.errors import RequestError
from tolsim.evaluation import Plan, built, solve_case
from tolsim.nominals import prepare
from tolsim.report.ways import Way
from tolsim.spread.part_values import nominal_values, part_values
from tolsim.spread.sampling import Draws, draw, factors
from tolsim.study import open_study
from tolsim.transitions.envelope import Envelope, envelope
from tolsim.transitions.prepared import prepared_changes
from tolsim.trim.nominal_unit import trim_nominal


def transitions_of(folder: Path | str, number: int) -> tuple[Envelope, ...]:
    """One unit of a results folder through every change of load, under every condition.

    Raises
    ------
    RequestError
        If the folder holds no run, not that unit, or its study states no change of load.
    """
    place = Path(folder)
    results = Results.open(place)
    if number not in results.factor_columns.column("unit").to_numpy():
        raise RequestError(f"There is no unit {number} in this run.")
    opened = open_study(place / STUDY_FILE, place / TABLES_FOLDER)
    if not opened.study.transitions:
        raise RequestError("The study of this run states no change of load: [[transitions]].")
    seed = results.provenance.get("seed", opened.study.run.seed)
    run = opened.study.run.model_copy(update={"seed": seed})
    study = opened.study.model_copy(update={"run": run})
    cases = prepare(study, opened.tables, jobs=None)
    cases, moves = prepared_changes(study, opened.tables, cases, jobs=None)
    names = factors(study, opened.tables)
    plan = Plan(study, opened.tables, names, cases, {}, moves)
    return tuple(unit_envelopes(plan, built(plan, draw(names, seed, number, 1))))


def unit_envelopes(plan: Plan, draws: Draws, conditions: Sequence[str] = ()) -> Iterator[Envelope]:
    """The first drawn unit, as it leaves the bench, through every change of load.

    Parameters
    ----------
    conditions : sequence of str
        All of the study if empty.
    """
    solved = {}
    for (condition, number), move in plan.moves.items():
        if conditions and condition not in conditions:
            continue
        states = plan.study.transitions[number].before, plan.study.transitions[number].after
        for state in states:
            if (condition, state) not in solved:
                solved[condition, state] = solve_case(plan, (condition, state), draws)
        old, new = (
            part_values(plan.study, plan.tables, condition, state, draws) for state in states
        )
        before, after = (solved[condition, state] for state in states)
        found = envelope(plan.study, condition, move, before, after[1], (old, new))
        if found is not None:
            yield found


def nominal_envelopes(plan: Plan, condition: str) -> Iterator[Envelope]:
    """The nominal unit through every change of load under one condition."""
    moved = trim_nominal(plan.study, plan.tables).moved if plan.moves else {}
    for (where, number), move in plan.moves.items():
        if where != condition:
            continue
        transition = plan.study.transitions[number]
        states = transition.before, transition.after
        old, new = (
            nominal_values(plan.study, plan.tables, condition, state, moved=moved)
            for state in states
        )
        before, after = (plan.cases[condition, state].nominal for state in states)
        start = before.case, before.solution
        found = envelope(plan.study, condition, move, start, after.solution, (old, new))
        if found is not None:
            yield found


def change_ways(plan: Plan, results: Results, condition: str) -> Iterator[Way]:
    """Drain and coil of the nominal unit and of the one whose drain goes highest."""
    if not plan.moves:
        return
    told = [("nominal unit", list(nominal_envelopes(plan, condition)))]
    worst = _worst_unit(results, condition)
    if worst is not None:
        draws = built(plan, draw(plan.factors, plan.study.run.seed, worst, 1))
        told.append((f"unit {worst}", list(unit_envelopes(plan, draws, (condition,)))))
    rated = ratings(plan.study.design)
    for unit, envelopes in told:
        for one in envelopes:
            for quantity, high in one.high.items():
                ref, _, what = quantity.partition(" ")
                yield Way(
                    one.transition.title,
                    quantity,
                    unit,
                    one.time,
                    one.low[quantity],
                    high,
                    rated.get(ref) if what == "drain" else None,
                )


def _worst_unit(results: Results, condition: str) -> int | None:
    """The unit whose drain goes highest in a change of load under a condition."""
    units = results.unit_columns
    columns = [name for name in units.names if name.endswith(".transition_drain_peak")]
    if not columns:
        return None
    here = (units.column("condition") == condition).to_numpy()
    peaks = np.max([units.column(name).to_numpy(float) for name in columns], axis=0)
    peaks = np.where(here & np.isfinite(peaks), peaks, -np.inf)
    place = int(np.argmax(peaks))
    return int(units.column("unit").iloc[place]) if np.isfinite(peaks[place]) else None
