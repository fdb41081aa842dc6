"""One chunk of units through every case: draws -> values -> orbits -> figures -> verdicts."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from functools import lru_cache

import joblib
import numpy as np
import pandas as pd

from tolsim.circuit.bulk.choice import Choice
from tolsim.circuit.continuation import solve_units
from tolsim.circuit.devices import Floats
from tolsim.circuit.orbit import Solution, Status
from tolsim.circuit.thermal import Case
from tolsim.design import Study
from tolsim.figures import measure_orbits, measure_start
from tolsim.nominals import CaseName, PreparedCase, case_of
from tolsim.spread.part_values import part_values
from tolsim.spread.sampling import Draws, Factor, draw
from tolsim.spread.table import SpreadTable
from tolsim.verdicts import judge


@dataclass(frozen=True)
class Plan:
    """All that a worker needs to evaluate any unit of a study."""

    study: Study
    tables: Mapping[str, SpreadTable]
    factors: tuple[Factor, ...]
    cases: Mapping[CaseName, PreparedCase]
    choices: Mapping[CaseName, Choice] = field(default_factory=dict)  # none: shooting


@dataclass(frozen=True)
class Chunk:
    """Finished units."""

    first: int
    rows: pd.DataFrame  # one row per unit, condition and state
    factors: pd.DataFrame  # one row per unit


def evaluate(plan: Plan, first: int, count: int, block: int) -> Chunk:
    """Units `first` ... `first + count - 1` in every case.

    Always `block` units are solved side by side, the surplus is dropped: so the last bits of a
    unit do not depend on how many units the run has.
    """
    draws = draw(plan.factors, plan.study.run.seed, first, block)
    tables = [case_rows(plan, name, draws).head(count) for name in plan.cases]
    rows = pd.concat(tables, ignore_index=True)
    factors = pd.DataFrame(draws.values[:count], columns=list(draws.names))
    factors.insert(0, "unit", np.arange(first, first + count))
    return Chunk(first, rows, factors)


@lru_cache(maxsize=1)
def _stored(plan_file: str) -> Plan:
    """Read a plan once per worker, its large arrays shared between workers through the file."""
    plan: Plan = joblib.load(plan_file, mmap_mode="r")
    return plan


def evaluate_stored(plan_file: str, first: int, count: int, block: int) -> Chunk:
    """Evaluate for a worker: the plan comes from a file, not with every task."""
    return evaluate(_stored(plan_file), first, count, block)


def solve_case(plan: Plan, name: CaseName, draws: Draws) -> tuple[Case, Solution]:
    """Orbits of the drawn units in one case, passive parts as warm as they run."""
    rises = plan.cases[name].heat.rises
    case = case_of(plan.study, part_values(plan.study, plan.tables, *name, draws, rises))
    compass, steps = plan.cases[name].compass, plan.study.run.steps_per_cycle
    choice = plan.choices.get(name)
    if choice is None:
        return case, solve_units(case, compass, steps)
    return case, choice.solve(case, compass, steps)


def case_figures(
    plan: Plan, name: CaseName, draws: Draws, case: Case, solution: Solution
) -> dict[str, Floats]:
    """Figures of solved units, start figures (cold) where the state is one to start in."""
    prepared = plan.cases[name]
    figures = dict(measure_orbits(case, solution))
    starts = plan.study.states[name[1]].starts_here
    if starts and plan.study.kind == "self-oscillating":
        cold = case
        if prepared.heat.rises:
            cold = case_of(plan.study, part_values(plan.study, plan.tables, *name, draws))
        figures |= measure_start(cold, prepared.start)
    return figures


def case_rows(plan: Plan, name: CaseName, draws: Draws) -> pd.DataFrame:
    """Rows of the drawn units in one case."""
    case, solution = solve_case(plan, name, draws)
    figures = case_figures(plan, name, draws, case, solution)
    verdicts = judge(
        plan.study,
        *name,
        solution.status,
        figures,
        plan.cases[name].figures,
    )
    figures.pop("mode_match", None)
    condition, state = name
    columns: dict[str, object] = {
        "unit": np.arange(draws.first, draws.first + draws.count),
        "condition": condition,
        "state": state,
        "verdict": verdicts.verdict.astype(object),
        "outcome": verdicts.outcome.astype(object),
        "failed_limits": verdicts.failed_limits,
        "status": np.array([_status_word(code) for code in solution.status], dtype=object),
        "way": solution.way.astype(object),
    }
    missing = np.full(draws.count, np.nan)
    ordered = {column: figures.get(column, missing) for column in figure_columns(plan)}
    return pd.DataFrame(columns | ordered)


def _status_word(code: int) -> str:
    return Status(code).name.lower().replace("_", " ")


def figure_columns(plan: Plan) -> Sequence[str]:
    """Every figure any case can have, in one order for all chunks."""
    names: dict[str, None] = {}
    for prepared in plan.cases.values():
        names |= dict.fromkeys(name for name in prepared.figures if name != "mode_match")
    return tuple(names)
