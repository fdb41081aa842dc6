"""The road from a study to its results.

A checked study -> factors -> nominal orbits of every case -> chunks of units, each drawn, solved
in every case, measured and judged -> statistics -> summary, tables, report.  Read `run_study`
first.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
from threadpoolctl import threadpool_limits

from tolsim.answers.provenance import provenance_of, used_tables
from tolsim.answers.results import SUMMARY_FILE, TABLES_FOLDER, Results
from tolsim.answers.summary import summarise
from tolsim.answers.unit_files import (
    Columns,
    FrameColumns,
    UnitFiles,
    UnitRows,
    damaged,
    write_text,
)
from tolsim.building import Progress, build_units
from tolsim.crosscheck import crosscheck
from tolsim.design import Study
from tolsim.errors import RequestError
from tolsim.evaluation import Plan
from tolsim.heatcheck import heat_check
from tolsim.lawcheck import law_check as check_laws
from tolsim.modelcheck import model_check
from tolsim.nominals import prepare
from tolsim.recheck import recheck
from tolsim.solver_choice import choose_solvers, wants_bulk
from tolsim.spread.reel_record import reel_records
from tolsim.spread.sampling import factors
from tolsim.starts.answers import answer_starts
from tolsim.study import StudyFile, open_study
from tolsim.transitions.prepared import prepared_changes

IDENTITY_FILE = "run.json"
_IDENTITY = {
    "study_sha256": "another study file",
    "seed": "another seed",
    "tables": "other spread tables",
    "recordings": "other recorded ramps",
    "versions": "another version of tolsim or of a library",
    "solver": "another choice of solvers",
}


def run_study(
    study: StudyFile | Path | str,
    *,
    units: int | None = None,
    seed: int | None = None,
    jobs: int | None = None,
    out: Path | str | None = None,
    progress: Progress | None = None,
    law_check: bool | None = None,
) -> Results:
    """Build, solve and judge the units of a study.

    Parameters
    ----------
    study : StudyFile or path
        As `open_study` reads it, or the file itself.
    units, seed : int, optional
        In place of what the study says.
    jobs : int, optional
        Worker processes; all cores if not given.
    out : path, optional
        Results folder; in memory if not given.  A folder of the same run that was stopped is
        taken up where it ended.
    progress : callable, optional
        Called with (finished units, all units).
    law_check : bool, optional
        Whether to estimate the yield under other laws; in place of what the study says.

    Returns
    -------
    Results

    Raises
    ------
    StudyError
        If the study has mistakes.
    RequestError
        If the folder holds another run.
    RunError
        If the nominal unit has no orbit at all.
    """
    opened = study if isinstance(study, StudyFile) else open_study(study)
    asked = _with_request(opened.study, units=units, seed=seed, law_check=law_check)
    opened = replace(opened, study=asked)
    record = provenance_of(opened)
    store = None
    if out is not None:
        store = _open_folder(Path(out), record, bulk=wants_bulk(opened.study))
    if progress is not None:
        progress(0, opened.study.run.units)
    # many small matrices: threads of the linear algebra would only get in each other's way
    with threadpool_limits(limits=1):
        return _solve_and_judge(opened, store, record, jobs, progress)


def _solve_and_judge(
    opened: StudyFile,
    store: UnitFiles | None,
    record: Mapping[str, Any],
    jobs: int | None,
    progress: Progress | None,
) -> Results:
    """The road itself, for a checked request."""
    cases, moves = prepared_changes(
        opened.study, opened.tables, prepare(opened.study, opened.tables, jobs), jobs
    )
    names = factors(opened.study, opened.tables)
    bulk = wants_bulk(opened.study)
    choices = choose_solvers(opened.study, opened.tables, names, cases, jobs) if bulk else {}
    plan = Plan(opened.study, opened.tables, names, cases, choices, moves)
    unit_table, factor_table = build_units(plan, jobs, store, progress)
    summary = summarise(
        opened.study,
        unit_table,
        factor_table,
        {name: prepared.figures for name, prepared in cases.items()},
        _quality(plan, unit_table, jobs),
        record,
    )
    summary["reels"] = reel_records(opened.study, opened.tables)
    summary["law_check"] = check_laws(plan, unit_table, jobs)
    summary["prototype"] = model_check(plan, unit_table, factor_table, jobs)
    summary |= answer_starts(plan, jobs)
    if store is None:
        assert isinstance(unit_table, FrameColumns)
        assert isinstance(factor_table, FrameColumns)
        return Results.in_memory(summary, opened.text, unit_table.frame, factor_table.frame)
    results = Results(summary, opened.text, store.folder, unit_table, factor_table)
    results = results.save(store.folder)
    _keep_tables(opened, store.folder / TABLES_FOLDER)
    keep_recordings(opened, store.folder)
    _write_report(plan, opened, results)
    return results


def _with_request(study: Study, **asked: int | None) -> Study:
    """The study with what was asked for (units, seed, law_check) in place of what it says."""
    changes = {name: value for name, value in asked.items() if value is not None}
    return study.model_copy(update={"run": study.run.model_copy(update=changes)})


def _open_folder(folder: Path, record: Mapping[str, Any], *, bulk: bool) -> UnitFiles:
    """Make the results folder, or find the finished chunks of the same run in it."""
    identity_file = folder / IDENTITY_FILE
    # more units of the same run are welcome: unit k is the same unit whatever their number
    identity = {key: record[key] for key in ("seed", "study_sha256", "tables", "versions")}
    identity["solver"] = "measured" if bulk else "shooting"
    identity["recordings"] = record.get("recordings")
    if identity_file.exists():
        held = _identity_of(identity_file)
        other = [words for key, words in _IDENTITY.items() if held.get(key) != identity[key]]
        if other and ((folder / SUMMARY_FILE).exists() or UnitFiles(folder).finished()):
            raise RequestError(
                f"'{folder}' holds a run of another kind: {', '.join(other)}."
                " Name another folder with --out, or remove it first."
            )
    elif folder.exists() and any(folder.iterdir()):
        raise RequestError(
            f"'{folder}' is not empty and holds no run. Name another folder with --out."
        )
    folder.mkdir(parents=True, exist_ok=True)
    write_text(identity_file, json.dumps(identity, indent=1) + "\n")
    for stale in (SUMMARY_FILE, "units.parquet", "factors.parquet"):
        (folder / stale).unlink(missing_ok=True)
    return UnitFiles(folder)


def _identity_of(file: Path) -> Mapping[str, Any]:
    """What the run in a folder was made from."""
    try:
        identity = json.loads(file.read_bytes())
    except ValueError:
        identity = None
    if not isinstance(identity, dict):
        raise damaged(file)
    return identity


def _quality(plan: Plan, units: Columns, jobs: int | None) -> dict[str, Any]:
    """How far the solutions can be trusted."""
    answer: dict[str, Any] = {}
    for figure in ("energy_balance", "orbit_residual"):
        values = np.abs(units.column(figure).to_numpy(np.float64, na_value=np.nan))
        values = values[np.isfinite(values)]
        empty = not values.size
        answer[figure] = {
            "worst": None if empty else float(values.max()),
            "median": None if empty else float(np.median(values)),
        }
    ways = units.column("way").value_counts()
    answer["solved_by"] = {str(way): int(count) for way, count in ways.items()}
    choices = {name: choice.record() for name, choice in plan.choices.items()}
    answer["solvers"] = [
        {"condition": condition, "state": state, **record}
        for (condition, state), record in choices.items()
    ]
    answer["self_heating"] = heat_check(plan, UnitRows.of(units))
    answer["crosscheck"] = crosscheck(plan, jobs)
    return answer | recheck(plan)


def _keep_tables(opened: StudyFile, folder: Path) -> None:
    """Copies of the spread table files the study used, so that the folder stands alone.

    With them go the files of readings they name.
    """
    folder.mkdir(exist_ok=True)
    for name in used_tables(opened.study):
        table = opened.tables[name]
        write_text(folder / table.file, table.file_text)
        for path, text in table.readings.items():
            (folder / path).parent.mkdir(parents=True, exist_ok=True)
            write_text(folder / path, text)


def keep_recordings(opened: StudyFile, folder: Path) -> None:
    """Copies of the recorded ramps, at the same place beside the copy of the study."""
    for path, recording in opened.recordings.items():
        (folder / path).parent.mkdir(parents=True, exist_ok=True)
        write_text(folder / path, recording.text)


def _write_report(plan: Plan, opened: StudyFile, results: Results) -> None:
    """The report beside the results."""
    from tolsim.presentation import report_content  # plotting only when a page is drawn
    from tolsim.report import write_report

    assert results.folder is not None
    write_report(report_content(plan, opened, results), results.folder / "report.html")
