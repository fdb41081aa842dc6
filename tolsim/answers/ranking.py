"""Rank the factors of a run for its start margin, the stresses asked for, and pass/fail."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from tolsim.answers.bounds import named_figure
from tolsim.answers.unit_files import Columns, UnitRows
from tolsim.design import Study
from tolsim.figure_names import FigureInfo
from tolsim.stats.ranking import Ranking, rank_factors

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]

MOST_RANKED_UNITS = 20_000  # more sharpen no interval anyone reads
START_MARGIN = "start_margin"
VERDICT = "pass/fail"


def rankings(
    study: Study, rows: UnitRows, factors: Columns, failed: Flags, undecided: Flags
) -> list[dict[str, Any]]:
    """Entries of `ranking` in the summary: start margin, `study.run.rank`, pass/fail.

    Parameters
    ----------
    factors : Columns
        One row per unit, for the same units as `rows`.
    failed, undecided : ndarray (N,)
        Verdicts of the units in ascending order of their numbers.
    """
    verdict = _verdict(failed, undecided)
    targets = [*ranked_figures(study, rows), (VERDICT, "Pass or fail", "1", verdict)]
    lot = None if study.lots is None else (rows.unit // study.lots.block)[:MOST_RANKED_UNITS]
    names = tuple(name for name in factors.names if name != "unit")
    used = slice(0, MOST_RANKED_UNITS)
    order = np.argsort(factors.column("unit").to_numpy(np.int64), kind="stable")[used]
    values = np.empty((order.size, len(names)))
    for j, name in enumerate(names):
        values[:, j] = factors.column(name).to_numpy(np.float64)[order]
    found = []
    for number, (name, title, unit_of_measure, target) in enumerate(targets):
        # A stream of its own, so that intervals are the same in every run of a study.
        rng = np.random.default_rng([study.run.seed, number])
        ranked = rank_factors(values, target[used], rng, study.run.confidence, lot=lot)
        entry = {"target": name, "title": title, "unit_of_measure": unit_of_measure}
        found.append({**entry, **_ranking(names, ranked)})
    return found


def worst_case(values: Floats, figure: FigureInfo) -> Floats:
    """Worst value of each unit over all cases (N, cases) -> (N,); NaN if it has none."""
    pick = np.fmax if figure.worse == "high" else np.fmin
    return np.asarray(pick.reduce(values, axis=1), np.float64)


def ranked_figures(study: Study, rows: UnitRows) -> list[tuple[str, str, str, Floats]]:
    """Column, title, unit of measure and worst value (N,) of the figures that are ranked."""
    found = []
    for column in dict.fromkeys((START_MARGIN, *study.run.rank)):
        named = named_figure(study, column)
        if named is None or column not in rows.source.names:
            continue
        part, figure = named
        title = f"{part} {figure.title.lower()}" if part else figure.title
        worst = worst_case(rows.figure(column), figure)
        found.append((column, title, figure.unit_of_measure, worst))
    return found


def _verdict(failed: Flags, undecided: Flags) -> Floats:
    """1 for fail, 0 for pass; nobody knows what an undecided unit does."""
    return np.where(failed, 1.0, np.where(undecided, np.nan, 0.0))


def _ranking(names: tuple[str, ...], found: Ranking) -> dict[str, Any]:
    order = np.argsort(-np.nan_to_num(found.share, nan=-np.inf), kind="stable")
    return {
        "units": found.units,
        "missing": found.missing,
        "reason": found.reason,
        "remainder": {
            "share": found.remainder,
            "low": found.remainder_low,
            "high": found.remainder_high,
        },
        "factors": [
            {
                "factor": names[j],
                "share": found.share[j],
                "low": found.share_low[j],
                "high": found.share_high[j],
                "distinguishable": found.distinguishable[j],
                "rank_correlation": found.correlation[j],
                "rank_low": found.correlation_low[j],
                "rank_high": found.correlation_high[j],
            }
            for j in order
        ],
    }
