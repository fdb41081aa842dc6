"""All that a study asks about switching on, answered: within a run, or by itself."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

from tolsim.errors import RequestError
from tolsim.evaluation import Plan
from tolsim.nominals import prepare
from tolsim.spread.sampling import factors
from tolsim.starts.contract import supply_contract
from tolsim.starts.grid import start_map
from tolsim.starts.repeats import repeated_starts
from tolsim.study import StudyFile, open_study

Progress = Callable[[int, int], None]

_WANTED = """[start_map]
across = {what = "ramp_time", values = ["100 us", "1 ms", "10 ms"]}
down = {what = "ambient", values = ["-20 degC", "25 degC", "60 degC"]}"""


def answer_starts(
    plan: Plan,
    jobs: int | None = None,
    progress: Progress | None = None,
    *,
    in_run: bool = True,
) -> dict[str, Any]:
    """Keys `start_map` ... of the summary, {} for what was not asked.

    Parameters
    ----------
    plan : Plan
    jobs : int, optional
        Worker processes; all cores if not given.
    progress : callable, optional
        Called with (finished, all) of what is being answered.
    in_run : bool
        Leave out what the study leaves to its own verb.
    """
    asked = plan.study.starts
    found: dict[str, Any] = {"start_map": {}, "supply_contract": {}, "repeated_starts": {}}
    if asked.start_map is not None and (asked.start_map.with_run or not in_run):
        found["start_map"] = start_map(plan, asked.start_map, jobs, progress)
    contract = asked.supply_contract
    if contract is not None and (contract.with_run or not in_run):
        found["supply_contract"] = supply_contract(plan, contract, jobs, progress)
    repeats = asked.repeated_starts
    if repeats is not None and (repeats.with_run or not in_run):
        found["repeated_starts"] = repeated_starts(plan, repeats, jobs, progress)
    return found


def map_starts(
    study: StudyFile | Path | str,
    *,
    units: int | None = None,
    seed: int | None = None,
    jobs: int | None = None,
    progress: Progress | None = None,
) -> dict[str, Any]:
    """Answer what a study asks about switching on, without building its units for a yield.

    Parameters
    ----------
    study : StudyFile or path
        As `open_study` reads it, or the file itself.
    units, seed : int, optional
        In place of what the study says; `units` in each of its tables on starts.
    jobs : int, optional
        Worker processes; all cores if not given.
    progress : callable, optional
        Called with (finished, all) of what is being answered.

    Returns
    -------
    dict
        Keys of the summary on switching on, with `yield` telling the confidence.

    Raises
    ------
    RequestError
        If the study asks nothing about switching on.
    """
    opened = study if isinstance(study, StudyFile) else open_study(study)
    starts = opened.study.starts
    given = {key: one for key, one in vars(starts).items() if one is not None}
    if not given:
        raise RequestError(f"The study asks nothing about switching on. Add for example\n{_WANTED}")
    if units is not None:
        fewer = {key: one.model_copy(update={"units": units}) for key, one in given.items()}
        starts = starts.model_copy(update=fewer)
    run = opened.study.run
    run = run if seed is None else run.model_copy(update={"seed": seed})
    asked = opened.study.model_copy(update={"starts": starts, "run": run})
    names = factors(asked, opened.tables)
    plan = Plan(asked, opened.tables, names, prepare(asked, opened.tables, jobs))
    return {
        "title": asked.title,
        "seed": run.seed,
        **answer_starts(plan, jobs, progress, in_run=False),
    }
