"""Units of a plan evaluated in worker processes, also with other laws than its own."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, replace
from pathlib import Path
from tempfile import TemporaryDirectory

import joblib
import numpy as np
from joblib import Parallel, delayed, parallel_config
from numpy.typing import NDArray

from tolsim.answers.unit_files import FrameColumns, UnitRows
from tolsim.evaluation import Plan, case_figures, passes, rows_of, solve_case, stored_plan
from tolsim.nominals import CaseName
from tolsim.spread.sampling import Draws, Factor, draw_chosen
from tolsim.spread.table import SpreadTable

Flags = NDArray[np.bool_]
Floats = NDArray[np.float64]
Numbers = NDArray[np.intp]

BLOCK = 128  # units solved side by side, at most
RARELY = 1e-9  # share of units that stands for none, while those in doubt are still looked at


@dataclass(frozen=True)
class Variation:
    """Other spread tables for a plan, with the factors they make."""

    tables: Mapping[str, SpreadTable]
    factors: tuple[Factor, ...]


@contextmanager
def on_disk(plan: Plan) -> Iterator[str]:
    """A plan in a file for as long as workers need it."""
    with (
        TemporaryDirectory(prefix="tolsim-", ignore_cleanup_errors=True) as folder,
        # the arrays of a unit are small: threads inside a worker would only get in the way
        parallel_config(backend="loky", inner_max_num_threads=1),
    ):
        plan_file = str(Path(folder) / "plan.joblib")
        joblib.dump(plan, plan_file)
        yield plan_file


def evaluate_variations(
    plan: Plan, variations: Sequence[Variation], numbers: Numbers, jobs: int | None
) -> list[Flags]:
    """Which of the units with these numbers (m,) pass every case, under each variation."""
    block = min(numbers.size, BLOCK)
    starts = range(0, numbers.size, block)
    tasks = [
        (v, numbers[first : first + block]) for v in range(len(variations)) for first in starts
    ]
    if jobs == 1 or len(tasks) <= 1:
        parts = [_passing(_varied(plan, variations[v]), chosen) for v, chosen in tasks]
    else:
        with on_disk(plan) as plan_file:
            work = Parallel(n_jobs=jobs or -1)
            parts = work(
                delayed(_passing_stored)(plan_file, variations[v], chosen) for v, chosen in tasks
            )
    return [
        np.concatenate([part for part, (owner, _) in zip(parts, tasks, strict=True) if owner == v])
        for v in range(len(variations))
    ]


def figures_of_units(
    plan: Plan, names: Sequence[CaseName], draws: Draws, jobs: int | None
) -> dict[CaseName, dict[str, Floats]]:
    """Figures (N,) of drawn units in some cases of a plan, NaN where a unit has none."""
    block = min(draws.count, BLOCK)
    tasks = [(name, first) for name in names for first in range(0, draws.count, block)]
    if jobs == 1 or len(tasks) <= 1:
        parts = [_figures(plan, name, draws.rows(first, block)) for name, first in tasks]
    else:
        with on_disk(plan) as plan_file:
            work = Parallel(n_jobs=jobs or -1)
            parts = work(
                delayed(_figures_stored)(plan_file, name, draws.rows(first, block))
                for name, first in tasks
            )
    return {
        name: {column: np.concatenate([part[column] for part in own]) for column in own[0]}
        for name in names
        for own in [[part for part, (case, _) in zip(parts, tasks, strict=True) if case == name]]
    }


def _figures(plan: Plan, name: CaseName, draws: Draws) -> dict[str, Floats]:
    return case_figures(plan, name, draws, *solve_case(plan, name, draws))


def _figures_stored(plan_file: str, name: CaseName, draws: Draws) -> dict[str, Floats]:
    return _figures(stored_plan(plan_file), name, draws)


def _varied(plan: Plan, variation: Variation) -> Plan:
    """The plan with other laws.

    In time only units whose start is in doubt are followed: the share of the others, a spot check
    of the run itself, would cost more than all the orbits.
    """
    run = plan.study.run
    spare = {"transition_share": 0.0, "power_on_share": min(run.power_on_share, RARELY)}
    study = plan.study.model_copy(update={"run": run.model_copy(update=spare)})
    return replace(plan, study=study, tables=variation.tables, factors=variation.factors)


def _passing(plan: Plan, chosen: Numbers) -> Flags:
    draws = draw_chosen(plan.factors, plan.study.run.seed, chosen)
    return passes(UnitRows.of(FrameColumns(rows_of(plan, draws, chosen.size, chosen.size, chosen))))


def _passing_stored(plan_file: str, variation: Variation, chosen: Numbers) -> Flags:
    return _passing(_varied(stored_plan(plan_file), variation), chosen)
