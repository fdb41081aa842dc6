"""One unit of a finished run again: its orbits, its waveforms, and why it failed.

The unit is drawn anew from seed and number and must come out as stored; so what is shown is what
was judged.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from tolsim.answers.bounds import bounds
from tolsim.answers.results import STUDY_FILE, TABLES_FOLDER, Results
from tolsim.answers.wording import shown
from tolsim.circuit.orbit import Status
from tolsim.errors import RequestError
from tolsim.evaluation import Plan, solve_case
from tolsim.nominals import CaseName, prepare
from tolsim.presentation import Signal, signals
from tolsim.spread.sampling import Draws, draw, factors
from tolsim.study import StudyFile, open_study

UNUSUAL = 6  # factors named in the story
DRAW_TOLERANCE = 1e-12


@dataclass(frozen=True)
class Replay:
    """One unit in every case.

    Attributes
    ----------
    number : int
    rows : DataFrame
        Its rows of the run.
    story : tuple of str
        What it does and why, as sentences.
    signals : mapping
        (condition, state) -> signals of the unit beside the nominal unit, for cases with an orbit.
    """

    number: int
    rows: pd.DataFrame
    story: tuple[str, ...]
    signals: Mapping[CaseName, tuple[Signal, ...]]


def replay_unit(folder: Path | str, number: int) -> Replay:
    """Solve one unit of a results folder again.

    Raises
    ------
    RequestError
        If the folder holds no run or not that unit, or the unit does not come out as stored.
    """
    place = Path(folder)
    results = Results.open(place)
    rows = _rows_of(results, number)
    opened = open_study(place / STUDY_FILE, place / TABLES_FOLDER)
    seed = results.provenance.get("seed", opened.study.run.seed)
    run = opened.study.run.model_copy(update={"seed": seed})
    study = opened.study.model_copy(update={"run": run})
    names = factors(study, opened.tables)
    draws = draw(names, seed, number, 1)
    _compare_with_stored(results, draws, number)
    plan = Plan(study, opened.tables, names, prepare(study, opened.tables, jobs=None))
    found = {}
    for name, prepared in plan.cases.items():
        case, solution = solve_case(plan, name, draws)
        if prepared.nominal.found and solution.status[0] in (Status.SETTLED, Status.UNSTABLE):
            found[name] = tuple(signals(study, prepared.nominal, case, solution))
    story = (
        *_outcome_story(opened, rows),
        *_draw_story(draws, results),
        *_neighbour(results, draws),
    )
    return Replay(number, rows, story, found)


def _rows_of(results: Results, number: int) -> pd.DataFrame:
    units = results.unit_columns.column("unit").to_numpy()
    here = np.flatnonzero(units == number)
    if not here.size:
        highest = int(units.max()) if units.size else -1
        raise RequestError(f"There is no unit {number} in this run. Its units are 0 to {highest}.")
    columns = results.unit_columns
    return pd.DataFrame({name: columns.column(name).iloc[here] for name in columns.names})


def _compare_with_stored(results: Results, draws: Draws, number: int) -> None:
    """Refuse to tell the story of another unit."""
    stored = results.factor_columns
    row = int(np.flatnonzero(stored.column("unit").to_numpy() == number)[0])
    for column, name in enumerate(draws.names):
        value = float(stored.column(name).iloc[row]) if name in stored.names else np.nan
        drawn = float(draws.values[0, column])
        if not abs(value - drawn) <= DRAW_TOLERANCE * max(1.0, abs(value)):
            raise RequestError(
                f"Unit {number} does not come out as stored: '{name}' is {drawn:.6g}, stored"
                f" {value:.6g}. Another version of tolsim or changed spread tables made this run;"
                " run the study again."
            )


def _outcome_story(opened: StudyFile, rows: pd.DataFrame) -> list[str]:
    """One sentence per case, with every limit it breaks."""
    every = bounds(opened.study)
    story = []
    for row in rows.to_dict("records"):
        where = f"{row['condition']} / {row['state']}"
        status = Status[str(row["status"]).upper().replace(" ", "_")]
        if row["verdict"] == "pass":
            story.append(f"{where}: {row['outcome']}, within every limit.")
            continue
        story.append(f"{where}: {row['outcome']}. {status.sentence}")
        broken = {int(text) for text in str(row["failed_limits"]).split(";") if text}
        for bound in every:
            value = row.get(bound.column)
            if bound.limit not in broken or value is None or not np.isfinite(value):
                continue
            unit = bound.figure.unit_of_measure
            who = f"{bound.part} {bound.figure.title.lower()}" if bound.part else bound.figure.title
            rule = opened.study.limits[bound.limit].rule
            if bound.at_most is not None and value > bound.at_most:
                limit = shown(bound.at_most, unit)
                story.append(f"  {who} {shown(value, unit)} is above {limit} ({rule}).")
            if bound.at_least is not None and value < bound.at_least:
                limit = shown(bound.at_least, unit)
                story.append(f"  {who} {shown(value, unit)} is below {limit} ({rule}).")
    return story


def _weights(results: Results, names: tuple[str, ...]) -> NDArray[np.float64]:
    """How much each factor matters for pass or fail, or for the start margin; equal if unknown."""
    for target in ("pass/fail", "start_margin"):
        for entry in results.summary.get("ranking", []):
            if entry["target"] == target and entry["factors"]:
                shares = {row["factor"]: row["share"] or 0.0 for row in entry["factors"]}
                weights = np.array([max(shares.get(name, 0.0), 0.0) for name in names])
                if weights.sum() > 0:
                    return weights / weights.sum()
    return np.full(len(names), 1.0 / max(len(names), 1))


def _draw_story(draws: Draws, results: Results) -> list[str]:
    """The factors that are far out, those that matter first."""
    distance = np.abs(draws.u[0] - 0.5) * np.sqrt(_weights(results, draws.names))
    order = np.argsort(-distance)[:UNUSUAL]
    return [
        "What is unusual about it (position among all units, 50 % is the middle):",
        *(f"  {draws.names[column]}: {100 * draws.u[0, column]:.1f} %" for column in order),
    ]


def _neighbour(results: Results, draws: Draws) -> list[str]:
    """The passing unit whose important factors are nearest."""
    units = results.unit_columns
    passed = (units.column("verdict") == "pass").groupby(units.column("unit")).all()
    if not passed.any() or passed.get(draws.first, False):
        return []
    stored = results.factor_columns
    table = np.column_stack([stored.column(name).to_numpy(float) for name in draws.names])
    numbers = stored.column("unit").to_numpy()
    spread = np.where(table.std(axis=0) > 0, table.std(axis=0), 1.0)
    away = (table - draws.values[0]) / spread
    gap = (away**2 * _weights(results, draws.names)).sum(axis=1)
    gap[~passed.reindex(numbers).to_numpy(bool)] = np.inf
    nearest = int(np.argmin(gap))
    leading = np.argsort(-np.abs(away[nearest]) * np.sqrt(_weights(results, draws.names)))[:3]
    moves = ", ".join(f"{draws.names[k]} {away[nearest, k]:+.1f} sd" for k in leading)
    return [f"Nearest passing unit: {numbers[nearest]}, which differs by {moves}."]


def story_text(replay: Replay) -> str:
    """The story as text for the terminal."""
    return "\n".join([f"Unit {replay.number}", *replay.story])


def draw_replay(replay: Replay, folder: Path | str) -> Path | None:
    """Picture of the waveforms where the unit does worst; None without an orbit."""
    from tolsim.report.unit_picture import draw_unit  # plotting only when a picture is wanted

    words = {
        (str(row["condition"]), str(row["state"])): str(row["outcome"])
        for row in replay.rows.to_dict("records")
    }
    failing = [
        str(row["condition"]) for row in replay.rows.to_dict("records") if row["verdict"] != "pass"
    ]
    conditions = [condition for condition, _ in replay.signals]
    if not conditions:
        return None
    shown_condition = next((name for name in failing if name in conditions), conditions[0])
    cases = {name: waves for name, waves in replay.signals.items() if name[0] == shown_condition}
    path = Path(folder) / f"unit-{replay.number}.png"
    draw_unit(
        replay.number,
        {" / ".join(name): waves for name, waves in cases.items()},
        {" / ".join(name): words[name] for name in cases},
        path,
    )
    return path
